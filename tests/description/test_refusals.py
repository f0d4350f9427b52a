"""What descriptions refuse: numbers that are none, priors that are none, names that are nearly right."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.description.sample.stack_file import read_stack


@pytest.mark.parametrize("value", [True, np.True_, "60", np.array([60.0]), 3 + 0j, stats.poisson(60)])
def test_a_thickness_is_a_number_or_a_continuous_prior(value):
    with pytest.raises(
        ValueError, match=r"Al\.thickness = .* is not a number; give a number in nm or a frozen"
    ):
        inv.Layer("Al", thickness=value)


@pytest.mark.parametrize(
    ("prior", "said"),
    [
        (
            stats.norm,
            "stats.norm is a family of distributions, not yet one of them: call it with its numbers",
        ),
        (stats.norm(60, -1), r"Al\.thickness has norm\(60, -1\) as its prior, which has no quantiles"),
        (
            stats.norm(np.nan, 1),
            r"norm\(nan, 1\) as its prior.*its numbers must be finite and its scale positive",
        ),
        (stats.norm([60, 61], 1), "which is several distributions; give numbers, not arrays"),
        (
            stats.halfcauchy(scale=1e4),
            r"halfcauchy\(scale=10000\).*whose mean is infinite: .* above 6\.37e\+05 nm",
        ),
    ],
)
def test_a_thickness_refuses_what_is_no_prior(prior, said):
    with pytest.raises(ValueError, match=said):
        inv.Layer("Al", thickness=prior)


def test_a_family_is_no_prior_of_a_bond_or_an_unknown():
    with pytest.raises(
        ValueError, match=r"Interface\.compliance = stats\.halfcauchy is a family of distributions"
    ):
        inv.Interface(compliance=stats.halfcauchy, boundary_conductance=np.inf)
    with pytest.raises(ValueError, match=r"Unknown 'x' got .* as its prior; give a frozen continuous"):
        inv.Unknown("x", stats.norm)


def test_a_bond_may_have_a_prior_without_a_mean():
    assert inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0).roughness == 0.0


def test_parts_are_given_one_by_one():
    parts = [inv.Layer("Al", thickness=60.0), inv.Substrate("Si", orientation="100")]
    with pytest.raises(
        ValueError, match=r"Part 1 of the Stack is a list, but parts are given one by one: Stack\(la"
    ):
        inv.Stack(parts)
    with pytest.raises(ValueError, match="Part 1 of the Stack is a PumpProbe; give Layer"):
        inv.Stack(inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3))
    with pytest.raises(
        ValueError, match="Repeat got a tuple; give Layer, Interface, Graded or Repeat, one by one"
    ):
        inv.Repeat(2, parts[0], ())
    with pytest.raises(ValueError, match=r"ambient = 1\.0; give 'air', 'vacuum', or a liquid"):
        inv.Stack(*parts, ambient=1.0)
    with pytest.raises(ValueError, match=r"slices must be a whole number, 1 or more, not 2\.5"):
        inv.Graded("Al", "Cu", thickness=60.0, slices=2.5)


def test_a_field_that_is_nearly_right_is_named():
    with pytest.raises(
        ValueError, match=r"Al got velocty\. Did you mean 'velocity'\? It takes density, velocity"
    ):
        inv.Layer("Al", thickness=60.0, velocty=6.4)


def test_complex_data_are_refused():
    with pytest.raises(
        ValueError, match="reflectance_change is complex; give real numbers: of a complex dr/r"
    ):
        inv.make_trace(np.linspace(0, 50, 30), reflectance_change=1j * np.ones(30))
    trace = inv.make_trace(np.linspace(0, 50, 30), reflectance_change=np.linspace(0, 1, 30))
    with pytest.raises(ValueError, match="reflectance_change is complex"):
        inv.first_look(trace.assign(reflectance_change=trace["reflectance_change"] * 1j))


GOOD = """
[setup]
pump = 400
probe = 800
pulse_rms = 0.3
[[part]]
layer = "Al"
thickness = "uniform(40, 40)"
[[part]]
interface = "bond"
compliance = 0.02
boundary_conductance = 100
[[part]]
substrate = "Si"
orientation = "100"
"""


@pytest.mark.parametrize(
    ("right", "wrong", "said"),
    [
        ("probe = 800", "prob = 800", r"\[setup\] got prob\. Did you mean 'probe'\? It takes pump, probe"),
        ("probe = 800\n", "", r"\[setup\] lacks probe"),
        ("thickness =", "thicknes =", r"\[\[part\]\] 1 \(layer\) got thicknes\. Did you mean 'thickness'\?"),
        ('thickness = "uniform(40, 40)"\n', "", r"\[\[part\]\] 1 \(layer\) lacks thickness"),
        ("boundary_conductance = 100\n", "", r"\[\[part\]\] 2 \(interface\) lacks boundary_conductance"),
        (
            "compliance = 0.02",
            "complience = 0.02",
            r"2 \(interface\) got complience\. Did you mean 'compliance'\?",
        ),
        (
            '"Al"',
            '"Alu"',
            r"\[\[part\]\] 1 \(layer\): No reference material is called 'Alu'\. Did you mean Au, Al",
        ),
        ('"100"', '"abc"', r"\[\[part\]\] 3 \(substrate\): 'Si' has no orientation 'abc'"),
        ('substrate = "Si"', 'subtrate = "Si"', r"\[\[part\]\] 3 must hold .*Did you mean 'substrate'\?"),
        ("uniform(", "unifrom(", r"is no prior; .* Did you mean 'uniform'\?"),
        ("\n[setup]", "ambiant = 'water'\n[setup]", r"'stack.toml' got ambiant\. Did you mean 'ambient'\?"),
        ("[[part]]", "[[parts]]", r"'stack.toml' got parts\. Did you mean 'part'\?"),
        ("[setup]", "[[setup]]", r"must hold \[setup\] once and \[\[part\]\], in double brackets"),
    ],
)
def test_a_stack_file_names_the_place_and_the_nearest_name(tmp_path, right, wrong, said):
    path = tmp_path / "stack.toml"
    path.write_text(GOOD.replace(right, wrong), encoding="utf-8")
    assert wrong in path.read_text(encoding="utf-8") != GOOD
    with pytest.raises(ValueError, match=said):
        read_stack(path)


def test_truth_values_are_no_measurement():
    with pytest.raises(ValueError, match="reflectance_change is True or False; give the numbers"):
        inv.make_trace(np.arange(50.0), reflectance_change=np.arange(50) > 20)


def test_an_index_in_quotes_is_refused():
    with pytest.raises(ValueError, match=r"n = '3\+4j' is not a complex number; write it like 2.77"):
        inv.Material("X", density=2.0, velocity=5.0, n="3+4j")
    with pytest.raises(ValueError, match=r"dn_dT = '1e-4j' is not a complex number"):
        inv.Material("X", density=2.0, velocity=5.0, n=3 + 4j, dn_dT="1e-4j")


def test_a_folder_is_no_file(tmp_path):
    for take in (inv.read_trace, inv.load, inv.read_index):
        with pytest.raises(ValueError, match="is a folder; give the name of a file in it"):
            take(tmp_path)

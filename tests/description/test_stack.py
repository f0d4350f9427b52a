"""The stack as it is drawn: periods, graded layers, free backs, and which unknown stands where."""

import json

import numpy as np
import pytest
from scipy import stats

from inverse.description.material.properties import Material, material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.records import decode, encode
from inverse.description.sample.parts import Graded, Interface, Layer, Repeat, Substrate
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Stack
from inverse.description.sample.stack_file import read_stack
from inverse.description.unknowns import Unknown

SETUP = PumpProbe(pump=400, probe=800, pulse_rms=0.3)
GAAS, GE = (material(name, "100") for name in ("GaAs", "Ge"))
BASE = Substrate("Si", orientation="100")


def superlattice(periods: int = 100, **bond) -> Stack:
    return Stack(
        Layer("Al", thickness=30.0),
        Repeat(
            periods,
            Layer(GAAS, thickness=stats.norm(5.6, 0.1)),
            Interface(boundary_conductance=200.0, **bond),
            Layer(GE, thickness=2.8, velocity=stats.norm(4.9, 0.1)),
        ),
        Interface(boundary_conductance=np.inf, compliance=stats.halfcauchy(scale=0.05)),
        Substrate(GAAS),
    )


def graded(**fields) -> Graded:
    return Graded(GAAS, GE, **{"thickness": stats.uniform(80, 40), "slices": 4, **fields})


def test_periods_lie_in_the_sample_in_the_order_drawn():
    stack = superlattice(3)
    assert stack.names == ("Al", "GaAs", "Ge", "GaAs", "Ge", "GaAs", "Ge", "GaAs#2")
    pairs = ["Al|GaAs", "GaAs|Ge", "Ge|GaAs", "GaAs|Ge", "Ge|GaAs", "GaAs|Ge", "Ge|GaAs#2"]
    assert stack.interface_names == tuple(pairs)
    assert str(stack) == "air / Al / 3 x [GaAs / Ge] / GaAs#2"


def test_periods_share_their_unknowns():
    bound = bind(superlattice(compliance=stats.halfcauchy(scale=0.02)), SETUP)
    assert len(bound.media) == 202
    assert list(bound.priors) == [
        "GaAs.thickness",
        "Ge.velocity",
        "GaAs|Ge.compliance",
        "Ge|GaAs#2.compliance",
    ]
    values = {"GaAs.thickness": np.array([5.5, 5.7])}
    for slots in bound.media[1:-1:2]:
        np.testing.assert_array_equal(bound.fill(slots, values)["thickness"], [5.5, 5.7])


def test_a_constant_that_repeats_is_listed_once():
    rows = [(c["place"], c["field"]) for c in bind(superlattice(), SETUP).constants]
    assert len(rows) == len(set(rows))
    assert ("Ge", "thickness") in rows


def test_layers_written_twice_have_unknowns_of_their_own():
    film = Layer("Al", thickness=stats.uniform(40, 40))
    bound = bind(Stack(film, Layer("W", thickness=5.0), film, BASE), SETUP)
    assert list(bound.priors) == ["Al.thickness", "Al#2.thickness"]


def test_periods_within_periods_and_a_bond_between_periods():
    inner = Repeat(2, Layer(GE, thickness=1.0), Layer(GAAS, thickness=1.0))
    bond = Interface(boundary_conductance=100.0, compliance=stats.halfcauchy(scale=0.1))
    stack = Stack(Repeat(2, Layer("W", thickness=3.0), inner, bond), BASE)
    assert str(stack) == "air / 2 x [W / 2 x [Ge / GaAs]] / Si"
    assert stack.names == ("W", "Ge", "GaAs", "Ge", "GaAs", "W", "Ge", "GaAs", "Ge", "GaAs", "Si")
    # the same bond lies below the last period too, so it is one unknown there as well
    assert [i for i, b in enumerate(stack.interfaces) if b is bond] == [4, 9]
    assert list(bind(stack, SETUP).priors) == ["GaAs|W.compliance"]


def test_two_bonds_between_the_same_media_are_told_apart():
    def bond() -> Interface:
        return Interface(boundary_conductance=100.0, compliance=stats.halfcauchy(scale=0.1))

    film = Layer("Al", thickness=10.0)
    period = [Layer("W", thickness=3.0), bond(), Layer("Ti", thickness=3.0), bond()]
    stack = Stack(Repeat(2, *period), *period[:3], bond(), film, BASE)
    assert len(set(bind(stack, SETUP).priors)) == 4


def test_periods_are_written_once():
    found = [(name, count) for part, name, count in superlattice(7).written() if name]
    assert found == [("Al", 1), ("GaAs", 7), ("Ge", 7), ("GaAs#2", 1)]


def test_a_graded_layer_has_one_thickness_and_its_faces_fields():
    soft = Material("soft", **{**FIELDS, "velocity": stats.norm(4.0, 0.1), "density": 4.0})
    hard = Material("hard", **{**FIELDS, "velocity": 8.0, "density": 6.0})
    bound = bind(Stack(Graded(soft, hard, thickness=stats.uniform(80, 40), slices=4), BASE), SETUP)
    assert list(bound.priors) == ["soft-hard.thickness", "soft-hard.top.velocity"]
    values = {"soft-hard.thickness": np.array([100.0]), "soft-hard.top.velocity": np.array([4.4])}
    filled = [bound.fill(slots, values) for slots in bound.media[:-1]]
    assert [f["thickness"][0] for f in filled] == [25.0] * 4
    np.testing.assert_allclose([f["velocity"][0] for f in filled], 4.4 + 3.6 * (np.arange(4) + 0.5) / 4)
    np.testing.assert_allclose([f["density"] for f in filled], [4.25, 4.75, 5.25, 5.75])
    assert bound.materials == ("soft-hard",) * 4 + ("Si",)


FIELDS = {
    "n": 2.0 + 1.0j,
    "heat_capacity": 2.0,
    "conductivity": 20.0,
    "thermal_stress_coefficient": 2e-3,
}


def test_a_graded_layer_of_one_material_is_that_material():
    bound = bind(Stack(Graded(GAAS, GAAS, thickness=90.0, slices=3), BASE), SETUP)
    plain = bind(Stack(Layer(GAAS, thickness=90.0), BASE), SETUP)
    one, other = bound.fill(bound.media[1], {}), plain.fill(plain.media[0], {})
    assert one.pop("thickness") == pytest.approx(30.0) and other.pop("thickness") == 90.0
    assert one == pytest.approx(other)


def test_optical_coefficients_of_a_slice_lie_between_the_faces():
    top, bottom = (Material(n, **FIELDS, dn_dT=c) for n, c in (("a", 1e-4 + 0j), ("b", 3e-4 + 4e-4j)))
    stack = Stack(Graded(top, bottom, thickness=10.0, slices=2), BASE)
    assert stack.media[0].material.dn_dT == pytest.approx(1.5e-4 + 1e-4j)
    assert stack.media[1].material.dn_dT == pytest.approx(2.5e-4 + 3e-4j)


def test_one_infinite_face_is_refused():
    cold = Material("a", **FIELDS, density=4.0, velocity=4.0)
    hot = Material(
        "b", **FIELDS, density=4.0, velocity=4.0, electron_heat_capacity=0.03, electron_phonon_coupling=1e17
    )
    with pytest.raises(ValueError, match="a-b has an infinite electron_phonon_coupling on one face only"):
        bind(Stack(Graded(cold, hot, thickness=10.0), BASE), SETUP)


def test_a_field_of_one_face_is_refused():
    plain = Material("a", **FIELDS, density=4.0, velocity=4.0)
    charged = Material("b", **FIELDS, density=4.0, velocity=4.0, initial_stress=0.1)
    with pytest.raises(ValueError, match="a-b has initial_stress, initial_stress_lifetime on one face only"):
        bind(Stack(Graded(plain, charged, thickness=10.0), BASE), SETUP)


def test_vacuum_below_has_an_index_and_nothing_else():
    bound = bind(Stack(Layer("Al", thickness=40.0), Substrate("vacuum")), SETUP)
    assert set(bound.media[-1]) == {"n_real_pump", "n_imag_pump", "n_real_probe", "n_imag_probe"}
    assert bound.fill(bound.media[-1], {})["n_real_probe"] == 1.0


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Stack(Layer("Al", thickness=4.0)), r"must end with a Substrate .*Substrate\('vacuum'\)"),
        (lambda: Stack(Substrate("vacuum")), "Vacuum below must follow a layer"),
        (
            lambda: Stack(Layer("Al", thickness=4.0), Interface(boundary_conductance=1.0), Substrate("air")),
            "there is nothing to bond to",
        ),
        (lambda: Substrate("vacuum", velocity=1.0), "is empty; it takes no orientation"),
        (lambda: Stack(BASE, Layer("Al", thickness=4.0)), "goes on below its Substrate"),
        (
            lambda: Stack(Interface(boundary_conductance=1.0), BASE),
            "Part 1 of the Stack is an Interface that has no",
        ),
        (lambda: Stack("Al", BASE), "Part 1 of the Stack is 'Al'; give Layer"),
        (lambda: Repeat(0, Layer("Al", thickness=4.0)), "got 0 as its count"),
        (lambda: Repeat(2.5, Layer("Al", thickness=4.0)), "got 2.5 as its count"),
        (lambda: Repeat(3), "Repeat got no layer"),
        (lambda: Repeat(3, Layer("Al", thickness=4.0), BASE), "give Layer, Interface, Graded or Repeat"),
        (lambda: graded(slices=1), "GaAs-Ge got slices=1; give 2 to 500"),
        (lambda: graded(thickness=6e-8), r"GaAs-Ge\.thickness = 6e-08 .*looks like m"),
    ],
)
def test_what_makes_no_sense_is_refused(make, message):
    with pytest.raises(ValueError, match=message):
        make()


def test_a_density_ratio_needs_a_substrate():
    stack = Stack(Layer("Al", thickness=4.0, density_ratio=1.1), Substrate("vacuum"))
    with pytest.raises(ValueError, match="Al has density_ratio, but there is no substrate to refer it to"):
        bind(stack, SETUP)


def test_files_keep_periods_and_graded_layers():
    shared = Unknown("d", stats.norm(5.6, 0.1))
    stack = Stack(
        Repeat(3, Layer(GAAS, thickness=shared), graded(thickness=shared)),
        Layer("Al", thickness=9.0),
        Substrate("air"),
    )
    again = decode(json.loads(json.dumps(encode(stack))))
    assert str(again) == str(stack)
    before, after = (bind(s, SETUP) for s in (stack, again))
    assert list(before.priors) == list(after.priors) == ["d"]
    assert before.fill(before.media[1], {"d": 5.0}) == after.fill(after.media[1], {"d": 5.0})


def test_files_keep_the_bench_and_what_interfaces_and_layers_have():
    setup = PumpProbe(pump=400, probe=800, pulse_rms=0.3, probe_angle=30, stage_scale=stats.norm(0, 1e-3))
    again = decode(json.loads(json.dumps(encode(setup))))
    assert again.probe_angle == 30.0 and again.stage_scale.std() == pytest.approx(1e-3)
    bond = Interface(boundary_conductance=100.0, roughness=1.5, areal_mass=stats.uniform(0, 3))
    film = Layer("Al", thickness=20.0, thickness_spread=0.4, initial_stress=0.1)
    drawn = Stack(film, bond, BASE, surface_roughness=stats.halfnorm(scale=1.0))
    stack = decode(json.loads(json.dumps(encode(drawn))))
    assert list(bind(stack, SETUP).priors) == ["surface.roughness", "Al|Si.areal_mass"]
    assert "surface_roughness" in repr(stack) and "surface_roughness" not in repr(Stack(film, BASE))
    assert stack.media[0].thickness_spread == 0.4 and stack.media[0].material.initial_stress == 0.1


def test_a_stack_file_takes_periods_graded_layers_and_vacuum(tmp_path):
    path = tmp_path / "stack.toml"
    path.write_text(
        """
        surface_roughness = "uniform(0, 2)"
        [setup]
        pump = 400
        probe = 800
        pulse_rms = 0.3
        stage_scale = "norm(0, 1e-3)"
        probe_angle = 45
        probe_polarisation = "p"
        [[part]]
        repeat = 4
        [[part.part]]
        layer = "Al"
        thickness = "norm(5.6, 0.1)"
        [[part.part]]
        layer = "W"
        thickness = 3.0
        [[part]]
        graded = ["Al", "W"]
        thickness = 20.0
        slices = 2
        [[part]]
        substrate = "vacuum"
        """,
        encoding="utf-8",
    )
    stack, setup = read_stack(path)
    assert setup.stage_scale.mean() == 0.0 and setup.beams[1].polarisation == "p"
    assert str(stack) == "air / 4 x [Al / W] / Al-W / vacuum"
    assert list(bind(stack, SETUP).priors) == ["surface.roughness", "Al.thickness"]


def test_a_stack_file_says_which_parts_there_are(tmp_path):
    path = tmp_path / "stack.toml"
    path.write_text("[setup]\npump = 400\n[[part]]\nfilm = 3\n", encoding="utf-8")
    with pytest.raises(ValueError, match=r"exactly one of layer, interface, substrate, graded, repeat"):
        read_stack(path)

"""Layers by their constants: the velocity of a cut, the unknowns' names, and what is refused."""

import json
import pickle

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.description.records import decode, encode
from inverse.description.sample.cuts import is_oblique
from inverse.description.sample.places import bind
from inverse.description.sample.stack_file import read_stack
from inverse.elastic import StiffnessTensor, longitudinal_velocity

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
# CRC constants of aluminium, GPa; density 2.697 g/cm3.
AL = {"symmetry": "cubic", "c11": 106.75, "c12": 60.41, "c44": 28.34}
UNKNOWN = {"symmetry": "cubic", "c11": stats.norm(107, 5), "c12": stats.norm(60, 5), "c44": stats.norm(28, 3)}
# CRC constants of sapphire, GPa.
SAPPHIRE = {
    "symmetry": "trigonal_6", "c11": 497.35, "c12": 163.97, "c13": 112.2, "c14": -23.58, "c33": 499.11, "c44": 147.39,
}  # fmt: skip


def film(**changes: object) -> inv.Layer:
    return inv.Layer("Al", **{"thickness": 60.0, "stiffness": AL, "orientation": "111", **changes})


def bound(layer: inv.Layer, **interface: object):
    bond = inv.Interface(compliance=0.02, boundary_conductance=100.0, **interface)
    return bind(inv.Stack(layer, bond, inv.Substrate("Si", orientation="100")), SETUP)


@pytest.mark.parametrize(
    ("orientation", "metres_per_second"), [("100", 6291.3), ("110", 6441.9), ("111", 6491.3)]
)
def test_the_velocity_is_that_of_the_cut(orientation: str, metres_per_second: float) -> None:
    # Computed outside this library from the same constants.
    slots = bound(film(orientation=orientation, density=2.697)).media[0]
    assert 1e3 * float(slots["velocity"].fill({})) == pytest.approx(metres_per_second, abs=0.06)


def test_an_oblique_cut_has_the_quasi_longitudinal_velocity_and_the_depths_stiffness() -> None:
    slots = bound(film(orientation=[1, 2, 4], density=2.697)).media[0]
    tensor = StiffnessTensor.cubic(c11=106.75, c12=60.41, c44=28.34)
    assert slots["velocity"].fill({}) == pytest.approx(
        longitudinal_velocity(tensor, 2.697, [1, 2, 4]), rel=1e-12
    )
    turned = tensor.oriented([1, 2, 4]).components[:, 2, :, 2]
    found = [
        [float(slots[f"depth_{n}"].fill({})) for n in row] for row in (("xx", "xy", "xz"), ("xy", "yy", "yz"))
    ]
    np.testing.assert_allclose(found, turned[:2], atol=1e-9)
    assert float(slots["depth_zz"].fill({})) == pytest.approx(turned[2, 2])


@pytest.mark.parametrize(
    ("symmetry", "orientation", "oblique"),
    [("cubic", "110", False), ("cubic", "112", True), ("trigonal_6", "c", False), ("trigonal_6", "x", False),
     ("trigonal_6", "y", True), ("trigonal_6", [1, 0, 1], True)],
)  # fmt: skip
def test_which_cuts_are_oblique(symmetry: str, orientation: object, oblique: bool) -> None:
    # Sapphire's y is no axis of symmetry: c14 mixes the waves along it.
    given = AL if symmetry == "cubic" else SAPPHIRE
    material = inv.Material("crystal", density=4.0, stiffness=given, orientation=orientation)
    assert is_oblique(material) is oblique


def test_constants_become_unknowns_by_name_and_may_be_shared() -> None:
    assert tuple(bound(film(stiffness=UNKNOWN)).priors) == ("Al.c11", "Al.c12", "Al.c44")
    c11 = inv.Unknown("c11_film", stats.norm(107, 5))
    shared = film(stiffness={**AL, "c11": c11})
    assert tuple(bound(shared).priors) == ("c11_film",)


def test_velocity_follows_the_unknowns_and_is_no_number_where_they_are_unstable() -> None:
    slots = bound(film(stiffness=UNKNOWN, orientation="100", density=2.7)).media[0]
    values = {"Al.c11": np.array([110.0, 110.0, np.nan]), "Al.c12": np.array([60.0, 120.0, 60.0])}
    found = slots["velocity"].fill({**values, "Al.c44": np.full(3, 28.0)})
    np.testing.assert_allclose(found, [np.sqrt(110.0 / 2.7), np.nan, np.nan])


def test_density_ratio_enters_the_velocity() -> None:
    slots = bound(film(orientation="100", density_ratio=1.2)).media[0]
    silicon = inv.material("Si", "100").density
    assert slots["velocity"].fill({}) == pytest.approx(np.sqrt(106.75 / (1.2 * silicon)))


def test_the_list_of_constants_holds_those_given_and_no_velocity() -> None:
    listed = {(row["place"], row["field"]): row["value"] for row in bound(film()).constants}
    assert listed["Al", "c12"] == 60.41 and ("Al", "velocity") not in listed


def test_a_cut_layer_survives_writing_and_pickling() -> None:
    stack = inv.Stack(film(stiffness=UNKNOWN, orientation=[1, 2, 4]), inv.Substrate("Si", orientation="100"))
    again = decode(json.loads(json.dumps(encode(stack))))
    slots = pickle.loads(pickle.dumps(bind(again, SETUP)))
    values = {"Al.c11": 107.0, "Al.c12": 60.0, "Al.c44": 28.0}
    expected = bind(stack, SETUP).media[0]["velocity"].fill(values)
    assert slots.media[0]["velocity"].fill(values) == expected


def test_constants_in_a_stack_file(tmp_path) -> None:
    text = """
    [setup]
    pump = 400
    probe = 800
    pulse_rms = 0.3
    [[part]]
    layer = "Al"
    thickness = 60
    orientation = "111"
    stiffness = {symmetry = "cubic", c11 = "norm(107, 5)", c12 = 60.4, c44 = "c44_film: norm(28, 3)"}
    [[part]]
    substrate = "Si"
    orientation = "100"
    """
    (tmp_path / "stack.toml").write_text(text, encoding="utf-8")
    assert tuple(bind(*read_stack(tmp_path / "stack.toml")).priors) == ("Al.c11", "c44_film")


def test_other_media_of_an_oblique_stack_shear_by_their_reference_constants() -> None:
    media = bound(film(orientation="112")).media
    silicon = media[1]
    # Si (100), CRC: c44 / c11 of its depth; the polycrystal's is Hill's average.
    ratio = float(silicon["depth_xx"].fill({})) / float(silicon["depth_zz"].fill({}))
    assert ratio == pytest.approx(79.62 / 165.78, rel=2e-3)
    tungsten = bind(
        inv.Stack(
            film(orientation="112"), inv.Layer("W", thickness=10.0), inv.Substrate("Si", orientation="100")
        ),
        SETUP,
    ).media[1]
    shear = np.sqrt(float(tungsten["depth_xx"].fill({})) / float(tungsten["density"].fill({})))
    # Hill vL / vT of tungsten 5214.6 / 2882.0 m/s, computed outside this library.
    assert float(tungsten["velocity"].fill({})) / shear == pytest.approx(5214.6 / 2882.0, rel=1e-3)
    assert float(tungsten["depth_xz"].fill({})) == 0.0


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"velocity": 6.4}, "Al got both stiffness and velocity"),
        ({"orientation": None}, "Al has the stiffness of a cubic crystal but no orientation"),
        ({"stiffness": {"c11": 107.0}}, "give the symmetry and its constants"),
        ({"stiffness": {"symmetry": "cubic", "c11": 107.0, "c12": 60.0}}, "missing c44"),
        ({"stiffness": {**AL, "c44": -28.0}}, r"Al\.c44 = -28 is outside"),
        ({"stiffness": {**AL, "c12": 120.0}}, "unstable cubic stiffness"),
        (
            {"stiffness": {**UNKNOWN, "c66": 28.0}},
            "give exactly the independent ones of a cubic crystal: c11, c12, c44",
        ),
        ({"stiffness": {**AL, "c11": 1.07e11}}, "looks like Pa"),
        ({"orientation": [0, 0, 0]}, "zero length"),
        ({"orientation": "basal"}, "orientation 'basal' is not known for a cubic crystal"),
    ],
)
def test_what_makes_no_sense_is_refused(changes: dict, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        bound(film(**changes))


def test_a_tangential_compliance_needs_shear_and_shear_needs_constants() -> None:
    with pytest.raises(ValueError, match="tangential_compliance, but no layer is cut obliquely"):
        bound(film(), tangential_compliance=0.1)
    slots = bound(film(orientation="112"), tangential_compliance=stats.halfcauchy(scale=0.1))
    assert tuple(slots.priors) == ("Al|Si.tangential_compliance",)
    bare = inv.Material(
        "resin",
        density=1.2,
        velocity=2.8,
        n=1.5,
        heat_capacity=1.7,
        conductivity=0.2,
        thermal_stress_coefficient=1e-3,
    )
    with pytest.raises(
        ValueError, match="resin stands in a stack with an oblique cut, where every medium shears"
    ):
        bind(
            inv.Stack(
                film(orientation="112"),
                inv.Layer(bare, thickness=50.0),
                inv.Substrate("Si", orientation="100"),
            ),
            SETUP,
        )


def test_the_thermal_stress_of_an_oblique_cut_is_only_known_for_cubic_crystals() -> None:
    layer = inv.Layer("sapphire", thickness=60.0, stiffness=SAPPHIRE, orientation=[1, 0, 1])
    with pytest.raises(ValueError, match="Al2O3 has no thermal_stress_coefficient"):
        bind(inv.Stack(layer, inv.Substrate("Si", orientation="100")), SETUP)

"""One description for many traces, changed by a table."""

import pickle

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.study.batches.recipe import Recipe, _with

PRIOR = stats.norm(60, 2)


@pytest.fixture(scope="module")
def recipe():
    stack = inv.Stack(
        inv.Layer("Al", thickness=stats.uniform(40, 40), density_ratio=stats.norm(1.16, 0.04)),
        inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )
    return Recipe(stack, inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3))


@pytest.fixture(scope="module")
def trace(splits):
    return inv.read_trace(splits / "A11.csv")


def test_without_columns_the_description_stands(recipe, trace):
    assert {"Al.thickness", "Al.density_ratio", "Al|Si.compliance", "time_zero"} <= set(
        recipe(trace, {}).names
    )


def test_a_distribution_replaces_a_prior_and_a_number_makes_known(recipe, trace):
    made = recipe(trace, {"Al.thickness": PRIOR, "Al|Si.compliance": 0.02, "time_zero": 0.1, "split": "A"})
    assert made.priors["Al.thickness"] is PRIOR
    assert "Al|Si.compliance" not in made.names and "time_zero" not in made.names
    assert "Al.density_ratio" in made.names
    assert (
        made.stack.interfaces[0].compliance == 0.02 and made.stack.interfaces[0].boundary_conductance == 100.0
    )


def test_a_materials_field_and_a_density_can_be_replaced(recipe, trace):
    made = recipe(trace, {"Al.velocity": stats.norm(6.4, 0.1), "Si.conductivity": 120.0, "Al.density": 2.7})
    assert "Al.velocity" in made.names and "Al.density_ratio" not in made.names
    assert made.stack.media[1].material.conductivity == 120.0


def test_parts_beside_a_repeated_period_keep_their_names():
    period = inv.Repeat(3, inv.Layer("W", thickness=5.0), inv.Layer("Al", thickness=5.0))
    stack = inv.Stack(inv.Layer("Al", thickness=60.0), period, inv.Substrate("Si", orientation="100"))
    assert _with(stack, "Al.thickness", 50.0).parts[0].thickness == 50.0
    with pytest.raises(ValueError, match=r"'W\.thickness' names no part of the stack; it has Al, Si"):
        _with(stack, "W.thickness", 50.0)


def test_it_travels_to_workers_and_has_a_written_form(recipe):
    assert pickle.loads(pickle.dumps(recipe)).record() == recipe.record()
    assert set(recipe.record()) == {"stack", "setup", "time_zero", "mask", "noise"}


@pytest.mark.parametrize(
    ("row", "message"),
    [
        ({"Au.thickness": 50.0}, r"'Au\.thickness' names no part of the stack; it has Al, Al\|Si, Si"),
        ({"Al|Si.colour": 1.0}, "an Interface has no 'colour'"),
        ({"Al.colour": 1.0}, r"Al got colour\. It takes density, "),
        ({"Al.thickness": 6e-8}, "It looks like m or um"),
    ],
)
def test_columns_that_make_no_sense(recipe, trace, row, message):
    with pytest.raises(ValueError, match=message):
        recipe(trace, row)


def test_real_poisoned_traces_end_as_marked_rows(recipe, trace):
    """NaN, wrong units, and noise thirty times the signal, each refused before any fitting."""
    holes, units, noisy = (trace.copy(deep=True) for _ in range(3))
    holes["reflectance_change"][50:60] = np.nan
    units = units.assign_coords(delay=("delay", trace["delay"].values * 1e3, {"units": "ps"}))
    size = 30 * float(np.abs(trace["reflectance_change"]).max())
    noisy["reflectance_change"] += size * np.random.default_rng(0).standard_normal(trace["delay"].size)
    traces = {"holes": holes, "units": units, "noisy": noisy}
    found = inv.batch(recipe, traces, seed=1, workers=0, progress=False)
    assert list(found["status"].values) == ["failed"] * 3
    for reason, said in zip(
        found["reason"].values, ("10 NaN", "looks like femtoseconds", "no rising edge"), strict=True
    ):
        assert said in reason

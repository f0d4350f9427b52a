"""From 24 traces to the verdict: batch and comparison on the shared experiment."""

import json

import numpy as np
import pytest
from scipy import stats

import inverse as inv


def material(row):
    """A material from the constants that a fit may use (coherent units in the file)."""
    return inv.Material(
        row["material"],
        density=row["density_g_cm3"],
        velocity=row["velocity_nm_ps"],
        n={400.0: complex(*row["n_pump"]), 800.0: complex(*row["n_probe"])},
        heat_capacity=1e3 * row["heat_capacity_GPa_K"],
        conductivity=1e3 * row["conductivity_GPa_nm2_ps_K"],
        thermal_stress_coefficient=row["thermal_stress_GPa_K"],
    )


@pytest.fixture(scope="module")
def recipe(vectors):
    rows = json.loads((vectors / "stacks.json").read_text())["al_si_weak"]["layers"]
    aluminium, silicon = (material(row) for row in rows)
    stack = inv.Stack(
        inv.Layer(
            aluminium,
            thickness=stats.uniform(40, 40),
            velocity=stats.norm(6.42, 0.10),
            density_ratio=stats.norm(1.16, 0.02),
        ),
        inv.Interface(
            compliance=stats.halfcauchy(scale=0.05), boundary_conductance=stats.loguniform(20, 500)
        ),
        inv.Substrate(silicon),
    )
    return inv.Recipe(stack, inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3))


@pytest.mark.slow
def test_the_realised_medians_and_the_verdict_come_out_of_the_traces(recipe, splits, tmp_path):
    """Some minutes: each site is searched and sampled in full."""
    truth = json.loads((splits / "truth.json").read_text())["traces"]
    traces = {name: inv.read_trace(splits / f"{name}.csv") for name in truth}
    table = {name: {"split": t["split"], "wafer": t["wafer"]} for name, t in truth.items()}
    results = inv.batch(
        recipe, traces, table=table, seed=1, neighbours="wafer", path=tmp_path / "splits.nc", progress=False
    )
    assert (results["status"] == "ok").all()
    compared = inv.compare_splits(results, quantity="Al|Si.stiffness", seed=1, margin=0.1)
    for name in "ABC":
        realised = np.exp(
            np.mean([np.log(t["stiffness_GPa_nm"]) for t in truth.values() if t["split"] == name])
        )
        assert compared.split(name).centre.low < realised < compared.split(name).centre.high
    assert compared.pair("C", "B").better > 0.999 and compared.pair("C", "B").decided
    assert 0.9 < compared.pair("B", "A").better < 0.999
    covered = [
        low < truth[name]["stiffness_GPa_nm"] < high
        for name, (low, high) in zip(
            results["site"].values,
            results["quantile"].sel(quantity="Al|Si.stiffness", probability=[0.025, 0.975]).values,
            strict=True,
        )
    ]
    assert sum(covered) >= stats.binom(24, 0.95).ppf(0.005)

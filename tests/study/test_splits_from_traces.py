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


def experiment(splits):
    """The truth, and the table of split and wafer."""
    truth = json.loads((splits / "truth.json").read_text())["traces"]
    return truth, {name: {"split": t["split"], "wafer": t["wafer"]} for name, t in truth.items()}


def check(compared, truth, stiff):
    """Realised medians in their intervals, C beyond doubt, B over A as the scatter between wafers allows."""
    for name, near in (("A", 5.9), ("B", 6.9), ("C", 19.4)):
        realised = np.exp(
            np.mean([np.log(t["stiffness_GPa_nm"]) for t in truth.values() if t["split"] == name])
        )
        assert realised == pytest.approx(near, abs=0.05)
        centre = compared.split(name).centre
        assert centre.low < (realised if stiff else 1 / realised) < centre.high
    assert compared.pair("C", "B").better > 0.999 and compared.pair("C", "B").decided
    assert 0.9 < compared.pair("B", "A").better < 0.999


@pytest.mark.slow
def test_fits_of_the_traces_give_the_realised_medians(recipe, splits):
    """Least squares only: draws from the normal approximation at each site's best minimum."""
    truth, table = experiment(splits)
    rng, results, offset, near = np.random.default_rng(0), {}, [], []
    for name, t in truth.items():
        inversion = recipe(inv.read_trace(splits / f"{name}.csv"), {})
        fit = inversion.least_squares(seed=1, starts=3, points=near)
        near = [dict(zip(fit.names, map(float, fit.values), strict=True))]
        z = rng.multivariate_normal(fit.best.z, fit.best.covariance_z, 1000)
        compliance = inversion.posterior.parameters.to_values(z)[:, fit.names.index("Al|Si.compliance")]
        results[name] = compliance
        offset.append(np.log(np.median(compliance) * t["stiffness_GPa_nm"]) / np.log(compliance).std())
    compared = inv.compare_splits(
        results,
        quantity="Al|Si.compliance",
        labels=table,
        prior=stats.halfcauchy(scale=0.05),
        seed=1,
        margin=0.1,
    )
    check(compared, truth, stiff=False)
    # The sites' own intervals hold too: offsets in standard deviations, 24 of them.
    assert stats.chi2(24).cdf(np.square(offset).sum()) < 0.995


@pytest.mark.slow
def test_the_realised_medians_and_the_verdict_come_out_of_the_traces(recipe, splits, tmp_path):
    """The whole way on two processes: each site is searched and sampled in full."""
    truth, table = experiment(splits)
    traces = {name: inv.read_trace(splits / f"{name}.csv") for name in truth}
    results = inv.batch(
        recipe,
        traces,
        table=table,
        seed=1,
        neighbours="wafer",
        path=tmp_path / "splits.nc",
        workers=2,
        progress=False,
    )
    assert (results["status"] == "ok").all()
    compared = inv.compare_splits(results, quantity="Al|Si.stiffness", seed=1, margin=0.1)
    check(compared, truth, stiff=True)
    covered = [
        low < truth[name]["stiffness_GPa_nm"] < high
        for name, (low, high) in zip(
            results["site"].values,
            results["quantile"].sel(quantity="Al|Si.stiffness", probability=[0.025, 0.975]).values,
            strict=True,
        )
    ]
    assert sum(covered) >= stats.binom(24, 0.95).ppf(0.005)

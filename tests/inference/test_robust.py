"""Student's t noise: against brute-force integration, its own mode and curvature, and on data with outliers."""

from types import SimpleNamespace

import numpy as np
import pytest
from problems import SETUP, bonded, noisy
from scipy import integrate, optimize, stats

import inverse as inv
from inverse.inference.checks.linearised import linearise
from inverse.inference.problem.noise import FREEDOM, Noise
from inverse.inference.problem.robust import eliminate_student, gaussian_noise, student_residuals

DELAY = np.arange(60) * 1.0
SHAPE = 3 * np.exp(-DELAY / 20)
ALL = np.ones(DELAY.size, dtype=bool)


def channel(data, name="reflectance_change", relative=None):
    noise = Noise("student", DELAY, np.ones(DELAY.size) if relative is None else relative)
    return SimpleNamespace(name=name, data=data, noise=noise, noise_values=lambda values: values)


def noise_values(white, discrepancy, time=5.0):
    return {
        name: np.array([v])
        for name, v in zip(
            ("white", "discrepancy", "correlation_time"), (white, discrepancy, time), strict=True
        )
    }


def eliminated(data, white, discrepancy, relative=None):
    one = channel(data, relative=relative)
    return eliminate_student([one], ALL, {one.name: SHAPE[None, None]}, noise_values(white, discrepancy))


def data_with_outliers(seed, drift):
    rng = np.random.default_rng(seed)
    path = Noise("correlated", DELAY, np.ones(DELAY.size)).draw(
        rng, {"white": 0.0, "discrepancy": drift, "correlation_time": 5.0}
    )
    data = 0.7 * SHAPE + path + 0.5 * rng.standard_t(FREEDOM, DELAY.size)
    data[7] += 8.0
    return data


def test_white_case_agrees_with_integration_over_the_coefficient():
    relative = np.linspace(0.5, 1.5, DELAY.size)
    data = data_with_outliers(1, 0.0)
    scale = 0.5 * relative

    def density(c):
        return np.exp(
            stats.t.logpdf((data - c * SHAPE) / scale, FREEDOM).sum()
            - np.log(scale).sum()
            + stats.norm.logpdf(c)
            + 80
        )

    moments = [
        integrate.quad(lambda c, k=k: c**k * density(c), 0.2, 1.2, epsabs=0, epsrel=1e-9)[0] for k in range(3)
    ]
    mean = moments[1] / moments[0]
    sd = np.sqrt(moments[2] / moments[0] - mean**2)
    found = eliminated(data, 0.5, 1e-9, relative)
    # An approximation of first order in what is not Gaussian; a hundredth of a unit of log likelihood is nothing.
    assert found.log_likelihood[0] == pytest.approx(np.log(moments[0]) - 80, abs=1e-2)
    assert found.mean[0, 0] == pytest.approx(mean, abs=0.05 * sd)
    assert 1 / found.factor[0, 0, 0] == pytest.approx(sd, rel=0.05)


def filtered(data, white, discrepancy, time=5.0):
    """Log marginal likelihood by brute force: the coefficient and the discrepancy on grids, delay by delay."""
    c = np.linspace(-0.6, 2.0, 131)
    f = np.linspace(-5, 5, 201) * discrepancy
    rho = np.exp(-1.0 / time)
    kernel = stats.norm.pdf(f[:, None], rho * f, discrepancy * np.sqrt(1 - rho**2)) * (f[1] - f[0])
    ahead = np.repeat(stats.norm.pdf(f, 0, discrepancy)[None], c.size, axis=0)
    total = stats.norm.logpdf(c)
    for i, y in enumerate(data):
        seen = (
            (ahead @ kernel.T if i else ahead)
            * stats.t.pdf((y - c[:, None] * SHAPE[i] - f) / white, FREEDOM)
            / white
        )
        share = seen.sum(axis=1) * (f[1] - f[0])
        total, ahead = total + np.log(share), seen / share[:, None]
    return np.log(np.exp(total - total.max()).sum() * (c[1] - c[0])) + total.max()


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize("drift", [0.1, 0.5])
def test_likelihood_of_the_discrepancy_agrees_with_brute_force_filtering(seed, drift):
    data = data_with_outliers(seed, drift)
    for discrepancy, tolerance in ((0.1, 0.01), (0.25, 0.03), (0.5, 0.1), (1.0, 0.3)):
        found = eliminated(data, 0.5, discrepancy).log_likelihood[0]
        # Against differences of several units between these values of the discrepancy.
        assert found == pytest.approx(filtered(data, 0.5, discrepancy), abs=tolerance), discrepancy


def test_squares_of_the_residuals_are_the_density_at_its_mode():
    data, white, discrepancy = data_with_outliers(3, 0.5), 0.5, 0.4
    covariance = discrepancy**2 * np.exp(-np.abs(DELAY[:, None] - DELAY) / 5.0)
    precision = np.linalg.inv(covariance)

    def minus_twice(v):
        u = (data - v[0] * SHAPE - v[1:]) / white
        return (FREEDOM + 1) * np.log1p(u * u / FREEDOM).sum() + v[1:] @ precision @ v[1:] + v[0] ** 2

    mode = optimize.minimize(
        minus_twice, np.zeros(DELAY.size + 1), method="BFGS", options={"gtol": 1e-6, "maxiter": 500}
    )
    one = channel(data)
    values = {name: float(v[0]) for name, v in noise_values(white, discrepancy).items()}
    residuals = student_residuals([one], ALL, {one.name: SHAPE[None]}, values)
    assert (residuals**2).sum() == pytest.approx(mode.fun, rel=1e-6)
    assert residuals[0] == pytest.approx(mode.x[0], abs=1e-3)


def test_gaussian_noise_of_the_same_curvature_gives_the_same_deviation():
    data = data_with_outliers(4, 0.3)
    one = channel(data)
    values = noise_values(0.5, 0.3)
    (noise,) = gaussian_noise(
        [one], ALL, {one.name: SHAPE[None]}, {k: float(v[0]) for k, v in values.items()}
    )
    gram, _ = noise.gram(SHAPE[None, None], values)
    factor = eliminated(data, 0.5, 0.3).factor[0, 0, 0]
    assert np.sqrt(1 + gram[0, 0, 0]) == pytest.approx(factor, rel=1e-4)
    assert noise.relative[7] > 10 * np.median(noise.relative)  # the outlier counts for next to nothing


def test_two_channels_add_up_and_a_batch_is_its_members():
    data = data_with_outliers(5, 0.3)
    other = data_with_outliers(6, 0.3)
    pair = [channel(data, "a"), channel(other, "b")]
    values = {k: np.repeat(v, 3) * np.array([1.0, 1.2, 1.5]) for k, v in noise_values(0.5, 0.3).items()}
    nothing = np.zeros((3, 1, DELAY.size))
    both = eliminate_student(pair, ALL, {"a": np.repeat(SHAPE[None, None], 3, 0), "b": nothing}, values)
    for i in range(3):
        one = {k: v[i : i + 1] for k, v in values.items()}
        first = eliminate_student(pair[:1], ALL, {"a": SHAPE[None, None]}, one)
        second = eliminate_student(pair[1:], ALL, {"b": nothing[:1]}, one)
        assert both.log_likelihood[i] == pytest.approx(
            first.log_likelihood[0] + second.log_likelihood[0], abs=1e-4
        )
        np.testing.assert_allclose(both.mean[i], first.mean[0], atol=1e-4)  # of a deviation of 0.08


def test_what_is_not_finite_has_no_likelihood_and_harms_no_other_set():
    data = data_with_outliers(7, 0.3)
    rows = np.repeat(SHAPE[None, None], 2, axis=0)
    rows[0, 0, 3] = np.nan
    one = channel(data)
    values = {k: np.repeat(v, 2) for k, v in noise_values(0.5, 0.3).items()}
    found = eliminate_student([one], ALL, {one.name: rows}, values)
    assert found.log_likelihood[0] == -np.inf
    assert found.log_likelihood[1] == pytest.approx(eliminated(data, 0.5, 0.3).log_likelihood[0], abs=1e-6)


def spoiled(trace, count, size, seed):
    """Move some delays of a trace by multiples of the range of its echoes."""
    out = trace.copy(deep=True)
    rng = np.random.default_rng(seed)
    data = out["reflectance_change"].values
    late = np.flatnonzero(out["delay"].values > 5)
    data[rng.choice(late, count, replace=False)] += size * np.ptp(data[late]) * rng.choice([-1, 1], count)
    return out


def test_outliers_neither_move_nor_widen_a_fit_that_admits_them():
    stack = bonded(thickness=stats.uniform(50, 20), velocity=6.42)
    trace = noisy(stack, {"Al.thickness": 60.0, "Al|Si.compliance": 0.02}, 0.01, seed=1)
    bad = spoiled(trace, 6, 0.3, seed=2)
    clean, plain, robust = (
        inv.Inversion(stack, SETUP, t, noise=noise).least_squares(starts=3, seed=1)
        for t, noise in ((trace, "correlated"), (bad, "correlated"), (bad, "student"))
    )
    k = clean.names.index("Al|Si.compliance")
    assert abs(robust.values[k] - clean.values[k]) < clean.sd[k]
    assert robust.sd[k] < 1.5 * clean.sd[k]
    assert plain.sd[k] > 2 * clean.sd[k]


def test_drawn_noise_has_the_tails_of_the_t_distribution():
    noise = Noise("student", np.arange(40000.0), np.ones(40000))
    values = {"white": 0.5, "discrepancy": 1e-9, "correlation_time": 5.0}
    drawn = noise.draw(np.random.default_rng(1), values) / 0.5
    for bound in (1.0, 3.0, 6.0):
        expected = 2 * stats.t.sf(bound, FREEDOM)
        share = (np.abs(drawn) > bound).mean()
        assert share == pytest.approx(expected, abs=4 * np.sqrt(expected / drawn.size)), bound


def test_joint_fit_and_its_budget_admit_outliers_in_each_trace():
    shared = inv.Unknown("v_film", stats.norm(6.42, 0.1))
    stacks = [
        bonded(thickness=stats.uniform(d - 10, 20), velocity=shared, compliance=0.02) for d in (60.0, 75.0)
    ]
    traces = [
        spoiled(noisy(s, {"Al.thickness": d, "v_film": 6.42}, 0.01, seed=i), 3, 0.3, seed=i)
        for i, (s, d) in enumerate(zip(stacks, (60.0, 75.0), strict=True))
    ]
    parts = [inv.Inversion(s, SETUP, t, noise="student") for s, t in zip(stacks, traces, strict=True)]
    joint = inv.Inversion.joint(parts)
    fit = joint.least_squares(starts=1, seed=1)
    linear = linearise(joint, fit.best.z, refit=False)
    at = [joint.names.index(name) for name in linear.names]
    own = np.sqrt(fit.best.covariance_z.diagonal()[at])
    np.testing.assert_allclose(np.sqrt(linear.covariance.diagonal()), own, rtol=0.05)
    total = sum(linear.scores.values()) + np.eye(own.size)
    np.testing.assert_allclose(linear.covariance @ total @ linear.covariance, linear.covariance, atol=1e-9)

"""The likelihood of a trace against the dense normal distribution of its data, both channels, drift included."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
DELAY = np.concatenate([np.arange(-5, 8, 0.5), np.arange(8, 40, 1.0)])
CHANNELS = ("reflectance_change", "optical_phase")
COEFFICIENTS = {"Al": (3.0 - 2.0j, 1e-3 + 4e-4j), "Si": (1.0 + 0.3j, 3e-4 + 1e-5j)}


def stack():
    film, base = (
        {"dn_dstrain": COEFFICIENTS[name][0], "dn_dT": COEFFICIENTS[name][1]} for name in ("Al", "Si")
    )
    return inv.Stack(
        inv.Layer("Al", thickness=stats.uniform(40, 40), velocity=stats.norm(6.42, 0.10), **film),
        inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100", **base),
    )


@pytest.fixture(scope="module")
def problem():
    truth = {"Al.thickness": 60.0, "Al.velocity": 6.4, "Al|Si.compliance": 0.03}
    clean = inv.simulate(stack(), SETUP, DELAY, values=truth)
    rng = np.random.default_rng(4)
    noisy = {c: clean[c].values + 1e-7 * rng.standard_normal(DELAY.size) for c in CHANNELS}
    trace = inv.make_trace(DELAY, **noisy)
    return inv.Inversion(stack(), SETUP, trace, time_zero=stats.norm(0, 0.05), noise="correlated")


@pytest.fixture(scope="module")
def model(problem):
    return problem.posterior.members[0].model


def points(problem, count=3):
    z = 0.3 * np.random.default_rng(1).standard_normal((count, len(problem.names)))
    return z, problem.posterior.parameters.to_values(z)


def local_values(problem, values):
    return problem.posterior.members[0].local(problem.posterior.parameters.named(values))


def dense_covariance(model, values, b):
    delay = model.delay[model.used]
    gap, blocks = np.abs(delay[:, None] - delay), []
    for channel in model.channels:
        noise = {k: float(v[b]) for k, v in channel.noise_values(values).items()}
        drift = noise["discrepancy"] ** 2 * np.exp(-gap / noise["correlation_time"])
        blocks.append(drift + np.diag((noise["white"] * channel.noise.relative) ** 2))
    size, zero = delay.size, np.zeros_like(gap)
    assert len(blocks) == 2 and blocks[0].shape == (size, size)
    return np.block([[blocks[0], zero], [zero, blocks[1]]])


def test_log_likelihood_is_the_dense_normals(problem, model):
    _, values = points(problem)
    local = local_values(problem, values)
    functions = model.functions(local)
    y = np.concatenate([c.data[model.used] for c in model.channels])
    found = model.log_likelihood(local)
    for b in range(len(values)):
        x = np.concatenate([functions[c.name][b] for c in model.channels], axis=1)
        k = x.T @ x + dense_covariance(model, local, b)
        # Standardised: densities of numbers near 1e-6 would lose digits in an eigendecomposition
        scale = np.sqrt(k.diagonal())
        white = np.linalg.solve(np.linalg.cholesky(k / np.outer(scale, scale)), y / scale)
        log_det = np.linalg.slogdet(k / np.outer(scale, scale))[1] + 2 * np.log(scale).sum()
        expected = -0.5 * (white @ white + log_det + y.size * np.log(2 * np.pi))
        assert found[b] == pytest.approx(expected, rel=1e-7)


def test_whitened_rows_are_those_of_the_gram_matrix(problem, model):
    _, values = points(problem, 1)
    local = local_values(problem, values)
    functions = model.functions(local)
    gram, _ = model.gram(functions, local)
    a, y = model.whitened({k: float(v[0]) for k, v in local.items()}, {k: f[0] for k, f in functions.items()})
    size = len(model.coefficient_names)
    expected = gram[0] + np.diag([1.0] * size + [0.0])
    rows = np.vstack([a.T, y])
    scale = np.sqrt(expected.diagonal())
    np.testing.assert_allclose(
        rows @ rows.T / np.outer(scale, scale), expected / np.outer(scale, scale), atol=1e-8
    )


def test_functions_times_coefficients_over_widths_are_the_trace(problem, model):
    _, values = points(problem, 1)
    local = local_values(problem, values)
    physical = {n: float(v[0]) for n, v in local.items() if n in model.bound.priors}
    trace = inv.simulate(stack(), SETUP, DELAY, values=physical, time_zero=float(local["time_zero"][0]))
    coefficients = []
    for group in model.layout.groups:
        p, q = next(v for k, v in COEFFICIENTS.items() if group.startswith(k))
        coefficients += [p.real, p.imag, q.real, q.imag]
    weights = np.append(coefficients, 1.0) / model.coefficient_scales(local)[0, :-2]
    for i, channel in enumerate(model.channels):
        functions = model.functions(local)[channel.name][0]
        expected = trace[channel.name].values[model.used]
        peak = np.abs(expected).max()
        np.testing.assert_allclose(weights @ functions[:-2], expected, rtol=0, atol=3e-6 * peak)
        offsets = np.zeros(2)
        offsets[i] = channel.baseline
        np.testing.assert_allclose(functions[-2:], np.repeat(offsets[:, None], expected.size, axis=1))


def test_posterior_is_prior_and_likelihood(problem, model):
    z, values = points(problem)
    likelihood = model.log_likelihood(local_values(problem, values))
    np.testing.assert_allclose(
        problem.posterior(z), stats.norm.logpdf(z).sum(axis=1) + likelihood, rtol=1e-12
    )
    priors = problem.posterior.parameters.priors
    densities = sum(prior.logpdf(values[:, i]) for i, prior in enumerate(priors))
    np.testing.assert_allclose(problem.posterior.log_prob(values), densities + likelihood, rtol=1e-12)


def test_masked_delays_do_not_count(problem, model):
    assert model.count == 2 * int(model.used.sum())
    assert not model.used[(DELAY > 0) & (DELAY < 1)].any()

"""The Jacobian of least squares against central differences, and both against the projection's exact derivative.

For residuals ``r = (1 - X X+) y`` the derivative along an unknown is ``-(1 - X X+) X' c - (X+)^T X'^T r`` with
``c = X+ y`` (Golub and Pereyra, SIAM J. Numer. Anal. 10, 413 (1973); from memory). X' is exact where the unknown is
time zero, as the columns' transforms times -s, and found by differences of fourth order for the others.
"""

import numpy as np
import pytest
from problems import BOND, FILM, SETUP, bonded, noisy

import inverse as inv
from inverse.inference.minima.minimise import jacobian
from inverse.inference.minima.projection import Projected
from inverse.response.basis import arrival, spectra, take
from inverse.response.instrument import measured_sample
from inverse.response.inverse_laplace import to_delays

NAMES = ("Al.thickness", "Al.velocity", "Al|Si.compliance", "time_zero")


@pytest.fixture(scope="module")
def problem():
    stack = bonded()
    values = {name: value for name, value in (FILM | BOND).items() if name in NAMES}
    inversion = inv.Inversion(stack, SETUP, noisy(stack, values, 1e-3, seed=3))
    known = {**values, "time_zero": 0.02, "noise.white": 3e-7, "noise.discrepancy": 2e-7}
    known["noise.correlation_time"] = 5.0
    point = np.array([[known[name] for name in inversion.names]])
    return inversion, inversion.posterior.parameters.to_z(point)[0]


@pytest.fixture(scope="module")
def columns_of(problem):
    """Jacobian, one column per physical unknown."""
    inversion, z = problem
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    found = Projected(inversion.posterior, physical, z).derivative(z[physical])
    return dict(zip(np.array(inversion.names)[physical], found.T, strict=True))


def local(inversion, z):
    member = inversion.posterior.members[0]
    parameters = inversion.posterior.parameters
    return member.model, member.local(parameters.named(parameters.to_values(np.atleast_2d(z))))


def functions(inversion, z):
    model, values = local(inversion, z)
    return model.functions(values)["reflectance_change"]


def through_the_projection(inversion, z, change):
    """Exact derivative of the residuals from that of the basis functions, shape (coefficients, delays)."""
    model, values = local(inversion, z)
    scalars = {name: float(v[0]) for name, v in values.items()}
    a, y = model.whitened(scalars, {"reflectance_change": functions(inversion, z)[0]})
    noise = model.channels[0].noise_values(scalars)
    moved = model.channels[0].noise.whiten(change, noise)
    moved = np.concatenate([moved, np.zeros((len(moved), len(a) - moved.shape[1]))], axis=1).T
    inverse = np.linalg.pinv(a)
    kept = y - a @ (inverse @ y)
    part = moved @ (inverse @ y)
    return -(part - a @ (inverse @ part)) - inverse.T @ (moved.T @ kept)


@pytest.mark.parametrize("channels", [("reflectance_change",), ("reflectance_change", "optical_phase")])
@pytest.mark.parametrize("noise", ["correlated", "white"])
def test_derivative_agrees_with_differenced_residuals(noise, channels):
    stack = bonded()
    trace = inv.simulate(stack, SETUP, np.arange(-5, 60, 0.5))[list(channels)]
    for k, name in enumerate(channels):
        kick = np.random.default_rng(k).standard_normal(trace[name].size)
        trace[name] = trace[name] + 1e-3 * float(np.abs(trace[name]).max()) * kick
    inversion = inv.Inversion(stack, SETUP, trace, noise=noise)
    z = np.random.default_rng(7).normal(scale=0.3, size=len(inversion.names))
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    projected = Projected(inversion.posterior, physical, z)
    found, expected = projected.derivative(z[physical]), jacobian(projected, z[physical], 1.0)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-6 * np.abs(expected).max(axis=0).min())


def agrees(column, exact):
    # The first rows of the residuals are the prior's; rounding of the transform, 1e-11, over the step of 6e-6
    data = column[-exact.size :]
    np.testing.assert_allclose(data, exact, rtol=0, atol=1e-5 * np.abs(exact).max())


@pytest.mark.parametrize("name", NAMES)
def test_jacobian_is_the_projections_derivative(problem, columns_of, name):
    inversion, z = problem
    step = 1e-3 * (np.array(inversion.names) == name)
    f = functions(inversion, z + np.outer([-2, -1, 1, 2], step))
    change = (f[0] - 8 * f[1] + 8 * f[2] - f[3]) / 12e-3
    agrees(columns_of[name], through_the_projection(inversion, z, change))


def test_derivative_by_time_zero_is_exact(problem, columns_of):
    inversion, z = problem
    model, values = local(inversion, z)
    zero = values["time_zero"][:, None]
    found = spectra(measured_sample(model.bound, values), model.beams, model.grid, model.layout, 1)
    moved = take(
        to_delays(model.grid, -model.grid.s * found, arrival(model.grid, zero)), "reflectance_change"
    )
    rows = functions(inversion, z)[0]
    change = np.zeros_like(rows)
    change[: moved.shape[1]] = moved[0] * model.coefficient_scales(values)[0, :-1, None]
    # The prior's widths go the other way as the size of what they predict.
    busy = np.append(~model.idle, False)
    change[:-1] -= rows[:-1] * (rows[busy] * change[busy]).sum() / (rows[busy] ** 2).sum()
    per_z = inversion.priors["time_zero"].std()
    agrees(columns_of["time_zero"], per_z * through_the_projection(inversion, z, change))

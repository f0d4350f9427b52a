"""Small problems with known truth for the tests of the diagnostics."""

from collections.abc import Mapping

import numpy as np
import xarray as xr
from scipy import stats

import inverse as inv
from inverse.inference.mcmc.ensembles import EnsembleRun
from inverse.inference.minima.least_squares import Fit
from inverse.inference.result import result_tree

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
BOND = {"Al|Si.compliance": 0.02, "Al|Si.boundary_conductance": 100.0}
FILM = {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al.density_ratio": 1.16}


def noisy(
    stack: inv.Stack,
    values: Mapping[str, float],
    relative: float,
    *,
    seed: int,
    delay: np.ndarray | None = None,
    drift: tuple[float, float] = (0.0, 5.0),
) -> xr.Dataset:
    """Simulate a trace with white noise relative to the echoes' range, and an Ornstein-Uhlenbeck drift (size, time)."""
    delay = np.arange(-5, 60, 0.5) if delay is None else delay
    clean = inv.simulate(stack, SETUP, delay, values=values)["reflectance_change"].values
    rng = np.random.default_rng(seed)
    late = clean[delay > 3]
    scale = float(late.max() - late.min())
    path = np.empty(delay.size)
    path[0] = rng.standard_normal()
    for i, step in enumerate(np.diff(delay)):
        kept = np.exp(-step / drift[1])
        path[i + 1] = kept * path[i] + np.sqrt(1 - kept**2) * rng.standard_normal()
    noise = scale * (relative * rng.standard_normal(delay.size) + drift[0] * path)
    return inv.make_trace(delay, reflectance_change=clean + noise)


def bonded(**priors: object) -> inv.Stack:
    """Al on Si with a spring; numbers or priors in place of the defaults."""
    given = {
        "thickness": stats.uniform(40, 40),
        "velocity": stats.norm(6.42, 0.10),
        "density_ratio": 1.16,
        "compliance": stats.halfcauchy(scale=0.05),
        "boundary_conductance": 100.0,
        **priors,
    }
    film = {k: given[k] for k in ("thickness", "velocity", "density_ratio")}
    bond = {k: given[k] for k in ("compliance", "boundary_conductance")}
    return inv.Stack(inv.Layer("Al", **film), inv.Interface(**bond), inv.Substrate("Si", orientation="100"))


def sampled(inversion: inv.Inversion, z: np.ndarray, seed: int = 0, notes: dict | None = None) -> xr.DataTree:
    """Put given draws of shape (ensembles, steps, walkers, unknowns) into a result, as if sampled."""
    ensembles, steps, walkers, size = z.shape
    lp = inversion.posterior(z.reshape(-1, size)).reshape(z.shape[:3])
    run = EnsembleRun(
        chain=z,
        log_prob=lp,
        names=inversion.names,
        burn_in=0,
        steps_total=steps,
        thin=1,
        acceptance=np.ones(ensembles),
        autocorrelation_time=np.ones(size),
        ess=np.full(size, float(ensembles * steps * walkers)),
        ess_tail=np.full(size, float(ensembles * steps * walkers)),
        rhat=np.ones(size),
        drift=np.zeros(size),
        converged=True,
        interrupted=False,
        message="given draws",
        evaluations=0,
        rejected_evaluations=0,
        seed=str(seed),
        versions={},
    )
    return result_tree(inversion, run, seed, notes or {})


def normal_draws(fit: Fit, seed: int, ensembles: int = 4, steps: int = 25, walkers: int = 10) -> np.ndarray:
    """Draw from the normal approximation at the best minimum."""
    rng = np.random.default_rng(seed)
    root = np.linalg.cholesky(fit.best.covariance_z + 1e-14 * np.eye(fit.best.z.size))
    return fit.best.z + rng.standard_normal((ensembles, steps, walkers, fit.best.z.size)) @ root.T


def posterior_draws(fit: Fit, seed: int, ensembles: int = 4, steps: int = 8, walkers: int = 10) -> np.ndarray:
    """Draw from the posterior by resampling wide normal draws with their weights (one minimum, few unknowns)."""
    rng = np.random.default_rng(seed)
    size = fit.best.z.size
    root = 1.5 * np.linalg.cholesky(fit.best.covariance_z + 1e-14 * np.eye(size))
    kicks = stats.multivariate_t(np.zeros(size), np.eye(size), df=6, seed=rng)
    drawn = kicks.rvs(2500)
    z = fit.best.z + drawn @ root.T
    log_weight = fit.inversion.posterior(z) - kicks.logpdf(drawn)
    weight = np.exp(log_weight - log_weight.max())
    return z[rng.choice(len(z), (ensembles, steps, walkers), p=weight / weight.sum())]

"""The bundled example by several ways: plain code, plain code that eliminates, and the library.

A step of one walker is one evaluation, so the autocorrelation time in steps is the evaluations that an effective sample
takes. The plain chains would take the better part of an hour: their time is extrapolated, evaluations times the time of
one, without search for the start or burn-in, which favours them; so does a chain that is too short for its
autocorrelation time, as the estimate then falls short. The library's own time is what it takes, burn-in included.

Run ``python tests/benchmarks/ways.py`` for the figures.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass

import jacobian
import numpy as np
import timing
import xarray as xr
from plain.density import Problem, log_posterior_eliminated, log_posterior_of_all
from plain.film import Grid, Material

import inverse as inv
from inverse.inference.mcmc.convergence import bulk_ess, integrated_time, tail_ess
from inverse.response.media import Medium, sample

WALKERS = 40

STEP = 0.1
"""ps; the delays of the example are multiples of it."""


def plain_problem(inversion: inv.Inversion) -> Problem:
    """Hand the library's constants, data and prior widths over to the plain code, in the same order of unknowns."""
    model = inversion.posterior.members[0].model
    (channel,) = model.channels
    delay = model.delay[model.used]
    parameters = inversion.posterior.parameters
    film, base = sample(model.bound, parameters.named(parameters.to_values(np.zeros((1, 9))))).media
    zero = inversion.priors["time_zero"]
    return Problem(
        film=_material(film),
        base=_material(base),
        base_sound=(base.density.item(), base.velocity.item()),
        wavelengths=(inversion.setup.pump, inversion.setup.probe),
        grid=Grid(delay, STEP, inversion.setup.pulse_rms),
        delay=delay,
        data=channel.data[model.used],
        widths=model.coefficient_widths,
        size=model.size,
        busy=np.full(9, True) if model.idle is None else ~model.idle,
        time_zero=(zero.mean(), zero.std()),
        level=inversion.priors["noise.white"].median(),
    )


def _material(m: Medium) -> Material:
    return Material(*(getattr(m, field).item() for field in Material._fields))


def order(inversion: inv.Inversion) -> list[int]:
    """Columns of the library's values in the plain code's order."""
    names = (
        "Al.thickness",
        "Al.density_ratio",
        "Al.velocity",
        "Al|Si.compliance",
        "Al|Si.boundary_conductance",
    )
    names = (*names, "time_zero", "noise.white", "noise.discrepancy", "noise.correlation_time")
    return [inversion.names.index(name) for name in names]


def amplitudes_sampled(inversion: inv.Inversion) -> Callable[[np.ndarray], np.ndarray]:
    """Return the plain code's density of unknowns and amplitudes, batched, for chains too long for the plain code.

    Takes (n, 19): nine standard normal variables of the priors, ten amplitudes in prior widths.
    """
    posterior = inversion.posterior
    (member,) = posterior.members
    model, (channel,) = member.model, member.model.channels
    data = channel.data[model.used]

    def block(points: np.ndarray) -> np.ndarray:
        z, amplitudes = points[:, :9], points[:, 9:]
        local = member.local(posterior.parameters.named(posterior.parameters.to_values(z)))
        rows = model.functions(local)[channel.name]
        residual = data - np.einsum("bc,bcn->bn", amplitudes, rows)
        gram, log_det = channel.noise.gram(residual[:, None], channel.noise_values(local))
        log_likelihood = -0.5 * (gram[:, 0, 0] + log_det + data.size * np.log(2 * np.pi))
        return log_likelihood - 0.5 * (points * points).sum(axis=1)

    def density(points: np.ndarray) -> np.ndarray:
        with np.errstate(all="ignore"):
            found = block(points)
        return np.where(np.isfinite(found), found, -np.inf)

    return density


def settled(inversion: inv.Inversion, posterior: xr.DataTree) -> tuple[np.ndarray, np.ndarray]:
    """Draw walkers from a posterior that is known: standard normal variables, and amplitudes given them."""
    rng = np.random.default_rng(1)
    draws = np.stack([posterior.posterior[name].values.ravel() for name in inversion.names], axis=1)
    values = draws[rng.choice(len(draws), WALKERS, replace=False)]
    (member,) = inversion.posterior.members
    found = member.model.eliminated(member.local(inversion.posterior.parameters.named(values)))
    return inversion.posterior.parameters.to_z(values), found.draw(rng)


def autocorrelation_time(
    density: Callable[[np.ndarray], np.ndarray], walkers: np.ndarray, steps: int, moves: object = None
) -> float:
    """Return the longest of all unknowns, in steps, from a chain that starts settled; short chains say too little."""
    import emcee

    sampler = emcee.EnsembleSampler(*walkers.shape, density, vectorize=True, moves=moves)
    state = np.random.RandomState(1).get_state()
    sampler.run_mcmc(emcee.State(walkers, random_state=state), steps)
    chain = sampler.get_chain()
    return max(integrated_time(chain[None, ..., k]) for k in range(walkers.shape[1]))


@dataclass(frozen=True)
class Run:
    """The library's own run: CPU time of search and sampling, s, and the least effective sample size, bulk or tail."""

    fit: float
    sampling: float
    sample_size: float


def library_run(inversion: inv.Inversion) -> tuple[Run, xr.DataTree]:
    """Fit, sample until every unknown has 1,000 effective samples, and make the result, without checks of the model."""
    started = time.process_time()
    fit = inversion.least_squares(seed=1)
    between = time.process_time()
    posterior = inversion.sample_posterior(seed=1, fit=fit, checks=False, progress=False)
    ended = time.process_time()
    draws = [posterior.posterior[name].values for name in inversion.names]
    least = min(min(bulk_ess(values), tail_ess(values)) for values in draws)
    return Run(between - started, ended - between, least), posterior


def seconds_per_set(inversion: inv.Inversion, z: np.ndarray, amplitudes: np.ndarray) -> dict[str, float]:
    """CPU time of one parameter set, s: plain codes, the library one by one and half an ensemble at a time."""
    problem = plain_problem(inversion)
    values = inversion.posterior.parameters.to_values(z)[:, order(inversion)]
    points, half = np.concatenate([values, amplitudes], axis=1), z[: WALKERS // 2]
    calls = {
        "plain": lambda: [log_posterior_of_all(x, problem) for x in points],
        "plain, eliminates": lambda: [log_posterior_eliminated(x, problem) for x in values],
        "library, one by one": lambda: [inversion.posterior(x[None]) for x in z],
        "library": lambda: [inversion.posterior(half), inversion.posterior(half)],
    }
    return {name: t / len(z) for name, t in timing.fewest_seconds(calls, 5).items()}


@dataclass(frozen=True)
class Comparison:
    """What 1,000 effective samples of the worst unknown cost."""

    run: Run
    rate: dict[str, float]
    steps: dict[str, float]

    @property
    def seconds(self) -> dict[str, float]:
        """CPU time of the sampling alone, way by way, s; the last is measured, preparation and burn-in included."""
        sampled, stretch, de = (1000 * t for t in self.steps.values())
        return {
            "plain": self.rate["plain"] * sampled,
            "plain, eliminates": self.rate["plain, eliminates"] * stretch,
            "library, one by one, stretch": self.rate["library, one by one"] * stretch,
            "library, batches, stretch": self.rate["library"] * stretch,
            "library, batches, differential evolution": self.rate["library"] * de,
            "library, own moves": 1000 * self.run.sampling / max(1000, self.run.sample_size),
        }

    @property
    def gain(self) -> float:
        """Plain code's sampling, over the library's time from the data to the result."""
        return self.seconds["plain"] / (self.run.fit + self.run.sampling)


def compare(steps: int = 1000) -> Comparison:
    """Run the library, measure every way's rate and chains; extrapolate 1,000 effective samples from both."""
    from emcee.moves import DEMove, StretchMove

    inversion = jacobian.example()
    run, posterior = library_run(inversion)
    z, amplitudes = settled(inversion, posterior)
    rate = seconds_per_set(inversion, z, amplitudes)
    both = np.concatenate([z, amplitudes], axis=1)
    mixed = [(DEMove(), 0.8), (StretchMove(), 0.2)]
    times = {
        "all sampled, stretch": autocorrelation_time(amplitudes_sampled(inversion), both, steps),
        "eliminated, stretch": autocorrelation_time(inversion.posterior, z, steps),
        "eliminated, differential evolution": autocorrelation_time(inversion.posterior, z, steps, mixed),
    }
    return Comparison(run, rate, times)


if __name__ == "__main__":
    timing.one_thread()
    found = compare(3000)
    print(found.run)
    print({name: f"{1e3 * t:.3f} ms" for name, t in found.rate.items()})
    print({name: f"{t:.0f} evaluations per effective sample" for name, t in found.steps.items()})
    for name, t in found.seconds.items():
        print(f"{name:42s} {t:8.1f} s per 1,000 effective samples")
    print(f"plain sampling over the library from data to result: {found.gain:.0f}")

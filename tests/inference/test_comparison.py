"""Leave-block-out comparison: closed form against refits, and ArviZ's answer on bonds that are known."""

import warnings
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from problems import SETUP, bonded, noisy, normal_draws, posterior_draws, sampled
from scipy import stats
from scipy.special import logsumexp

import inverse as inv
from inverse.inference.checks.block_density import block_log_density, blocks
from inverse.inference.checks.comparison import compare, to_arviz, with_log_likelihood
from inverse.inference.problem.likelihood import TraceModel
from inverse.inference.problem.noise import Noise

TRUTH = {"Al.thickness": 60.0, "Al|Si.compliance": 0.02}
WELDED = {"Al.thickness": 60.0}
BLOCK = 6.0


def problem(
    relative: float, *, compliance, truth=TRUTH, noise="white", seed=1, drift=(0.0, 5.0)
) -> inv.Inversion:
    prior = {"thickness": stats.norm(60, 0.5), "velocity": 6.42}
    source = bonded(**prior) if "Al|Si.compliance" in truth else bonded(**prior, compliance=0.0)
    trace = noisy(source, truth, relative, seed=seed, drift=drift)
    return inv.Inversion(bonded(**prior, compliance=compliance), SETUP, trace, time_zero=0.0, noise=noise)


def without(model: TraceModel, block: np.ndarray) -> TraceModel:
    """The same model with a block of the fitted delays left out."""
    index = np.delete(np.flatnonzero(model.used), block)
    used = np.zeros_like(model.used)
    used[index] = True
    channels = tuple(
        replace(c, noise=Noise(c.noise.model, model.delay[used], np.delete(c.noise.relative, block)))
        for c in model.channels
    )
    return replace(model, used=used, grid=model.at(model.delay[used]), channels=channels)


def test_blocks_are_long_enough_and_hold_every_delay() -> None:
    delay = np.concatenate([np.arange(-5, -1, 0.5), np.arange(3, 40, 0.5), np.arange(40, 60, 2.0)])
    found = blocks(delay, 6.0)
    np.testing.assert_array_equal(np.concatenate(found), np.arange(delay.size))
    for block in found[:-1]:
        following = delay[block[-1] + 1]
        assert following - delay[block[0]] >= 6.0
        assert block.size >= 5
    assert np.ptp(delay[found[-1]]) >= 3.0


def test_a_block_as_long_as_the_trace_is_refused() -> None:
    with pytest.raises(ValueError, match="block=50 ps leaves fewer than two blocks of 40 ps"):
        blocks(np.arange(0, 40.5, 0.5), 50.0)


@pytest.mark.parametrize("noise", ["white", "correlated"])
def test_density_of_a_block_is_the_ratio_of_likelihoods_with_and_without_it(noise: str) -> None:
    """p(y_b | y_-b) = p(y) / p(y_-b), each from a likelihood that knows nothing of blocks."""
    inversion = problem(0.01, compliance=stats.halfcauchy(scale=0.05), noise=noise)
    values = inversion.posterior.parameters.to_values(
        0.3 * np.random.default_rng(2).standard_normal((3, len(inversion.names)))
    )
    # One prior for both: the widths' common factor follows the delays that are fitted.
    (member,) = inversion.posterior.members
    held = replace(member, model=replace(member.model, size=None))
    inversion.posterior = replace(inversion.posterior, members=(held,))
    found = block_log_density(inversion, values, BLOCK)
    (member,) = inversion.posterior.members
    local = member.local(inversion.posterior.parameters.named(values))
    full = member.model.log_likelihood(local)
    cut = blocks(member.model.delay[member.model.used], BLOCK)
    for i, block in enumerate(cut):
        rest = without(member.model, block).log_likelihood(local)
        np.testing.assert_allclose(found[:, i], full - rest, rtol=1e-7, atol=1e-5)


def test_leave_block_out_agrees_with_refits_on_a_grid() -> None:
    """Thickness and white noise on a grid: elpd_b = ln sum pi p(y) - ln sum pi p(y_-b), a refit for every block."""
    inversion = problem(0.02, compliance=0.02)
    assert inversion.names == ("Al.thickness", "noise.white")
    fit = inversion.least_squares(seed=1, starts=2)
    axes = [
        z + np.sqrt(v) * np.linspace(-5, 5, 21)
        for z, v in zip(fit.best.z, fit.best.covariance_z.diagonal(), strict=True)
    ]
    z = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 2)
    (member,) = inversion.posterior.members
    local = member.local(inversion.posterior.parameters.named(inversion.posterior.parameters.to_values(z)))
    prior = -0.5 * (z * z).sum(axis=1)
    full = member.model.log_likelihood(local)
    cut = blocks(member.model.delay[member.model.used], BLOCK)
    refits = np.array(
        [
            logsumexp(prior + full) - logsumexp(prior + without(member.model, b).log_likelihood(local))
            for b in cut
        ]
    )
    mass = np.exp(prior + full - logsumexp(prior + full))
    rng = np.random.default_rng(3)
    draws = z[rng.choice(len(z), (4, 25, 10), p=mass / mass.sum())]
    tree = sampled(inversion, draws)
    found = compare({"one": tree, "same": tree}, block=BLOCK)
    # 1000 draws: the density's Monte Carlo deviation over a block is a few hundredths.
    np.testing.assert_allclose(found.models[0].pointwise, refits, atol=0.15)
    assert found.models[0].elpd == pytest.approx(refits.sum(), abs=0.3)
    unreliable = bool(found.models[0].pareto_k.max() > 0.7)
    assert [f"{n}: Pareto k is above 0.7" in " ".join(found.warnings) for n in ("one", "same")] == [
        unreliable
    ] * 2
    assert found.models[1].difference == 0.0


@cache
def results(seed: int) -> dict:
    """Welded and spring models of a trace; odd seeds have a spring, even ones a perfect bond."""
    truth = TRUTH if seed % 2 else WELDED
    out = {}
    for name, compliance in {"welded": 0.0, "spring": stats.halfcauchy(scale=0.05)}.items():
        inversion = problem(0.01, compliance=compliance, truth=truth, noise="correlated", seed=seed)
        fit = inversion.least_squares(seed=1, starts=2)
        out[name] = sampled(inversion, posterior_draws(fit, seed=4))
    return out


def test_a_spring_is_told_from_a_perfect_bond() -> None:
    found = compare(results(5))
    assert [m.name for m in found.models] == ["spring", "welded"]
    assert found.models[1].difference < -4
    assert "'spring' predicts what was left out better than 'welded'" in found.verdict
    assert "blocks of" in str(found)


def test_a_perfect_bond_is_not_told_from_a_spring_that_may_be_stiff() -> None:
    found = compare(results(6))
    assert abs(found.models[1].difference) < 4
    assert found.verdict.startswith("The trace does not tell")


def test_arviz_reads_the_tree_and_gives_the_same_sums() -> None:
    import arviz as az

    trees = results(5)
    with_blocks = {name: with_log_likelihood(t, block=BLOCK) for name, t in trees.items()}
    assert with_blocks["spring"]["log_likelihood"]["trace"].dims == ("chain", "draw", "block")
    ours = compare(trees, block=BLOCK)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        table = az.compare({name: to_arviz(t) for name, t in with_blocks.items()})
        loo = {name: az.loo(to_arviz(t)) for name, t in with_blocks.items()}
    assert list(table.index) == [m.name for m in ours.models]
    for m in ours.models:
        theirs = loo[m.name]
        assert float(theirs.elpd_loo if "elpd_loo" in dir(theirs) else theirs.elpd) == pytest.approx(
            m.elpd, rel=1e-9
        )
        assert float(theirs.se) == pytest.approx(m.se, rel=0.1)


def test_blocks_shorter_than_the_correlation_time_are_warned_of() -> None:
    """Draws whose correlation time is 8 ps or more."""
    inversion = problem(0.01, compliance=0.02, noise="correlated")
    z = normal_draws(inversion.least_squares(seed=1, starts=2), seed=4, steps=4)
    i = inversion.names.index("noise.correlation_time")
    long = inversion.posterior.parameters.to_z(np.full((1, len(inversion.names)), 8.0))[0, i]
    z[..., i] = long + 0.1 * np.abs(z[..., i])
    tree = sampled(inversion, z)
    assert not any(
        "shorter than the correlation" in w for w in compare({"a": tree, "b": tree}, block=15.0).warnings
    )
    found = compare({"a": tree, "b": tree}, block=5.0)
    assert any("are shorter than the correlation time" in w for w in found.warnings)


def test_students_t_noise_is_refused() -> None:
    inversion = problem(0.02, compliance=0.02, noise="student")
    with pytest.raises(ValueError, match='compare fits with noise="correlated"'):
        block_log_density(inversion, np.array([[p.median() for p in inversion.priors.values()]]), BLOCK)


def test_wrong_arguments_are_refused() -> None:
    inversion = problem(0.02, compliance=0.02)
    other = problem(0.02, compliance=0.02, seed=2)
    fit = inversion.least_squares(seed=1, starts=1)
    tree = sampled(inversion, normal_draws(fit, seed=4, steps=2))
    with pytest.raises(ValueError, match="compare takes a mapping of names to two or more results"):
        compare({"one": tree})
    with pytest.raises(ValueError, match="b: compare needs draws"):
        compare({"a": tree, "b": fit})
    with pytest.raises(ValueError, match="with_log_likelihood needs draws"):
        with_log_likelihood(fit)
    with pytest.raises(ValueError, match="'a' and 'b' are not of the same fitted data"):
        compare({"a": tree, "b": sampled(other, normal_draws(fit, seed=4, steps=2))})

from concurrent.futures import Future, ThreadPoolExecutor

import numpy as np
import pytest
from densities import (
    CorrelatedGaussian,
    gaussian,
    half_gaussian_nan,
    half_gaussian_raising,
    slow_gaussian,
    two_modes,
)

from inverse.inference.mcmc import advance, loop
from inverse.inference.mcmc.convergence import Convergence, effective_sample_size, walker_major
from inverse.inference.mcmc.ensembles import run_ensembles
from inverse.inference.mcmc.executor import worker_pool
from inverse.inference.mcmc.verdict import Ending, Targets


def starts(ensembles=4, walkers=16, dimension=3, seed=0):
    return np.random.default_rng(seed).normal(size=(ensembles, walkers, dimension))


def names(dimension=3):
    return tuple(f"x{k}" for k in range(dimension))


def fixed_run(log_prob=gaussian, points=None, steps=120, **settings):
    """Run for a fixed number of steps."""
    points = starts() if points is None else points
    settings = {"seed": 5, "names": names(points.shape[-1]), "chunk": 30, "progress": False} | settings
    return run_ensembles(log_prob, points, ess=1e9, max_steps=steps, **settings)


def assert_same_draws(one, other):
    np.testing.assert_array_equal(one.chain, other.chain)
    np.testing.assert_array_equal(one.log_prob, other.log_prob)
    np.testing.assert_array_equal(one.acceptance, other.acceptance)
    assert (one.steps_total, one.burn_in, one.thin) == (other.steps_total, other.burn_in, other.thin)


class OnlySubmit:
    """Runs a task at once, in this process."""

    def submit(self, function, *arguments):
        future = Future()
        future.set_result(function(*arguments))
        return future


# ---- the right answer


def variance_errors(run):
    """Deviation of each variance from one, in Monte Carlo errors from the effective size of the squares."""
    squares = run.chain**2
    sizes = np.array([effective_sample_size(walker_major(squares[..., k])) for k in range(len(run.names))])
    errors = np.sqrt(squares.var(axis=(0, 1, 2)) / sizes)
    return (squares.mean(axis=(0, 1, 2)) - 1.0) / errors


def test_ten_correlated_dimensions():
    """Variances of one and correlation 0.8, each within three Monte Carlo errors."""
    density = CorrelatedGaussian(10, 0.8)
    run = run_ensembles(density, starts(4, 40, 10), seed=3, names=names(10), ess=4000, progress=False)
    assert run.converged, run.message
    assert np.all(run.ess >= 4000) and np.all(run.ess_tail >= 4000) and np.all(run.rhat <= 1.01)
    assert np.all(np.abs(variance_errors(run)) < 3.0)
    products = run.chain[..., 0] * run.chain[..., 1]
    error = products.std() / np.sqrt(effective_sample_size(walker_major(products)))
    assert abs(products.mean() - 0.8) < 3.0 * error
    means = run.chain.mean(axis=(0, 1, 2)) * np.sqrt(run.ess)
    assert np.all(np.abs(means) < 3.5)


@pytest.mark.slow
def test_wrong_snooker_would_fail_the_same_check(monkeypatch):
    """Negative control: the refused move gives variances far too small, and the check above sees it."""
    from emcee.moves import DESnookerMove

    monkeypatch.setattr(advance, "LAST_WRONG_SNOOKER", (0, 0, 0))
    run = fixed_run(gaussian, starts(4, 40, 10), steps=1500, chunk=500, moves=DESnookerMove())
    assert np.mean(variance_errors(run)) < -5.0


def test_log_prob_belongs_to_the_draws():
    run = fixed_run()
    flat = run.chain.reshape(-1, 3)
    np.testing.assert_array_equal(gaussian(flat), run.log_prob.ravel())


def test_run_stops_at_the_targets_and_not_before():
    run = run_ensembles(gaussian, starts(), seed=1, names=names(), ess=800, progress=False)
    assert run.converged and not run.interrupted
    assert "Converged after" in run.message
    assert run.steps_total < 2000
    assert run.burn_in >= 5 * run.autocorrelation_time.max()
    harder = run_ensembles(gaussian, starts(), seed=1, names=names(), ess=3000, progress=False)
    assert harder.steps_total > run.steps_total


def test_far_starts_do_not_bias_the_draws():
    points = starts() * 0.1 + 300.0
    run = run_ensembles(gaussian, points, seed=1, names=names(), ess=2000, progress=False)
    assert run.converged, run.message
    assert np.all(np.abs(run.chain).max(axis=(0, 1, 2)) < 7.0)
    assert np.all(np.abs(variance_errors(run)) < 3.5)


# ---- what must not be hidden


def test_two_modes_are_flagged_by_rhat():
    points = starts()
    points[:2, :, 0] += 10.0
    points[2:, :, 0] -= 10.0
    run = fixed_run(two_modes, points, steps=1000, chunk=200)
    assert not run.converged
    assert run.rhat[0] > 1.5 and np.all(run.rhat[1:] < 1.05)
    means = run.message.split("ensembles disagree: their means of x0 are ")[1].split(". Either")[0]
    np.testing.assert_allclose([float(mean) for mean in means.split(", ")], [10, 10, -10, -10], atol=0.3)
    assert "several modes" in run.message
    assert "more steps are needed" not in run.message


def test_one_ensemble_says_that_it_may_have_missed_a_mode():
    points = starts(ensembles=1)
    points[..., 0] += 10.0
    run = run_ensembles(two_modes, points, seed=1, names=names(), ess=300, progress=False)
    assert run.converged
    assert "single ensemble cannot show that it has missed a mode" in run.message


def test_steps_used_up_say_how_many_more():
    run = fixed_run(steps=600, chunk=200)
    assert not run.converged and not run.interrupted
    assert "Not converged after 600 steps" in run.message
    assert "of 1000000000" in run.message
    short = run_ensembles(gaussian, starts(), seed=1, names=names(), ess=4000, max_steps=400, progress=False)
    more = int(short.message.split("bout ")[1].split(" more steps")[0])
    longer = run_ensembles(
        gaussian, starts(), seed=1, names=names(), ess=4000, max_steps=int(400 + 1.5 * more), progress=False
    )
    assert longer.converged, (short.message, longer.message)


def test_a_run_too_short_to_be_judged_asks_for_enough_to_judge_it():
    """Once it said that fewer than 100 steps cannot be judged and that about 10 more were needed, at 60."""
    ones = np.ones(2)
    found = Convergence(10, True, ones, 1200 * ones, np.array([873.0, 950.0]), ones, 0 * ones, 0.0)
    ending = Ending(
        found,
        Targets(1000, 1.01, 60, 50),
        ("a", "b"),
        np.zeros((4, 2)),
        np.ones(4),
        60,
        50,
        1,
        1,
        0,
        "",
        False,
    )
    said = ending.remarks()
    assert (
        "Fewer than 100 steps cannot be judged. Smallest tail effective sample size 873 of 1000 (a)." in said
    )
    assert "About 40 more steps are needed." in said


def test_few_steps_are_not_judged():
    run = run_ensembles(
        gaussian, starts(), seed=1, names=names(), ess=1, rhat=5, max_steps=50, progress=False
    )
    assert not run.converged
    assert "Fewer than 100 steps" in run.message


def test_single_step_still_gives_a_run():
    run = fixed_run(steps=1, chunk=1)
    assert run.chain.shape == (4, 1, 16, 3)
    assert not run.converged


def test_nan_counts_as_impossible():
    points = np.abs(starts())
    run = run_ensembles(half_gaussian_nan, points, seed=2, names=names(), ess=3000, progress=False)
    assert run.chain[..., 0].min() >= 0.0
    error = np.sqrt((1.0 - 2.0 / np.pi) / run.ess[0])
    assert abs(run.chain[..., 0].mean() - np.sqrt(2.0 / np.pi)) < 3.0 * error
    assert 0 < run.rejected_evaluations < run.evaluations
    assert run.evaluations == 4 * 16 * (run.steps_total + 1)
    assert f"{run.rejected_evaluations} of {run.evaluations} evaluations were NaN or failed" in run.message


def test_exceptions_count_as_impossible_for_their_own_point_only():
    points = np.abs(starts())
    nan, raising = (fixed_run(density, points) for density in (half_gaussian_nan, half_gaussian_raising))
    assert_same_draws(nan, raising)
    assert nan.rejected_evaluations == raising.rejected_evaluations
    assert "ArithmeticError: negative thickness" in raising.message


def test_plus_infinity_is_refused(capsys):
    def infinite_somewhere(points):
        return np.where(points[:, 0] > 2.0, np.inf, gaussian(points))

    with pytest.raises(ValueError, match=r"log_prob is \+inf at .*make the density finite"):
        fixed_run(infinite_somewhere, np.clip(starts(), -1.9, 1.9))
    assert capsys.readouterr().out == ""


# ---- reproducibility


def test_equal_seeds_give_equal_chains_and_leave_numpys_global_state_alone():
    np.random.seed(1)
    before = np.random.get_state()
    one = fixed_run()
    after = np.random.get_state()
    np.testing.assert_array_equal(before[1], after[1])
    assert before[2:] == after[2:]
    np.random.seed(2)
    assert_same_draws(one, fixed_run())
    assert not np.array_equal(one.chain, fixed_run(seed=6).chain)


def test_ensembles_have_streams_of_their_own():
    same_place = np.repeat(starts(ensembles=1), 3, axis=0)
    run = fixed_run(points=same_place)
    assert not np.array_equal(run.chain[0], run.chain[1])
    assert not np.array_equal(run.chain[1], run.chain[2])


def test_seed_sequence_is_not_used_up():
    sequence = np.random.SeedSequence(9).spawn(2)[1]
    one = fixed_run(seed=sequence)
    assert_same_draws(one, fixed_run(seed=sequence))
    assert one.seed == "9 spawned 1"
    assert not np.array_equal(one.chain, fixed_run(seed=9).chain)


def test_draws_do_not_depend_on_the_executor():
    serial = fixed_run()
    with worker_pool(2) as processes, ThreadPoolExecutor(3) as threads:
        for executor in (processes, threads, OnlySubmit()):
            assert_same_draws(serial, fixed_run(executor=executor))


@pytest.mark.parametrize("seconds", [1e-9, 1e9])
def test_draws_do_not_depend_on_how_steps_are_divided(monkeypatch, seconds):
    one = fixed_run(chunk=60)
    monkeypatch.setattr(loop, "SECONDS_BETWEEN_NEWS", seconds)
    assert_same_draws(one, fixed_run(chunk=60))
    assert_same_draws(one, fixed_run(chunk=17))


# ---- thinning and layout


def test_memory_is_bounded_by_thinning():
    whole, thinned = (fixed_run(steps=1000, chunk=90, memory=size) for size in (512.0, 0.3))
    assert (whole.thin, thinned.thin) == (1, 8)
    every = whole.walker_major()
    some = thinned.walker_major()
    assert thinned.chain.nbytes + thinned.log_prob.nbytes < 0.3 * 2**20
    assert np.all(some.step % 8 == 0)
    lookup = {(w, s): k for k, (w, s) in enumerate(zip(every.walker, every.step, strict=True))}
    places = [lookup[pair] for pair in zip(some.walker, some.step, strict=True) if pair in lookup]
    assert len(places) > 0.9 * some.step.size
    shared = [k for k, pair in enumerate(zip(some.walker, some.step, strict=True)) if pair in lookup]
    np.testing.assert_array_equal(some.values["x1"][:, shared], every.values["x1"][:, places])
    np.testing.assert_allclose(thinned.autocorrelation_time, whole.autocorrelation_time, rtol=0.3)
    np.testing.assert_allclose(thinned.ess, whole.ess, rtol=0.3)
    assert "One step in 8 was stored" in thinned.message


def test_walker_major_layout():
    run = fixed_run()
    draws = run.walker_major()
    kept = run.chain.shape[1]
    assert run.chain.shape == (4, run.steps_total - run.burn_in, 16, 3)
    assert list(draws.values) == ["x0", "x1", "x2"]
    for place in (0, kept - 1, kept, 5 * kept + 7):
        walker, step = draws.walker[place], draws.step[place]
        index = step - run.burn_in - 1
        assert (walker, index) == divmod(place, kept)
        np.testing.assert_array_equal(draws.values["x2"][:, place], run.chain[:, index, walker, 2])
        np.testing.assert_array_equal(draws.log_prob[:, place], run.log_prob[:, index, walker])
    assert draws.step[-1] == run.steps_total


def test_versions_and_seed_are_kept():
    import emcee

    run = fixed_run()
    assert run.versions["emcee"] == emcee.__version__
    assert run.seed == "5"
    assert run.acceptance.shape == (4,)
    assert np.all((0.2 < run.acceptance) & (run.acceptance < 0.9))


# ---- interruption


class InterruptedAt:
    """A density during whose n-th call Ctrl-C is pressed."""

    def __init__(self, call):
        self.left = call

    def __call__(self, points):
        self.left -= 1
        if self.left == 0:
            raise KeyboardInterrupt
        return gaussian(points)


def test_interrupt_hands_back_what_there_is():
    whole = fixed_run(steps=400)
    run = fixed_run(InterruptedAt(1500), steps=400)
    assert run.interrupted and not run.converged
    assert 0 < run.steps_total < 400
    assert f"Interrupted after {run.steps_total} steps" in run.message
    same = fixed_run(steps=run.steps_total)
    assert_same_draws(run, same)
    assert whole.steps_total == 400


def test_interrupt_before_any_step_goes_through():
    with pytest.raises(KeyboardInterrupt):
        fixed_run(InterruptedAt(10))


def test_interrupt_while_showing_progress():
    def press(news):
        if news["steps"] >= 60:
            raise KeyboardInterrupt

    run = fixed_run(progress=press)
    assert run.interrupted and run.steps_total == 60
    assert_same_draws(run, fixed_run(steps=60))


def test_progress_function_gets_the_numbers():
    news = []
    run = run_ensembles(
        slow_gaussian, starts(), seed=1, names=names(), ess=300, chunk=100, progress=news.append
    )
    assert [item["steps"] for item in news] == sorted({item["steps"] for item in news})
    assert np.isnan(news[0]["least_ess"])
    last = news[-1]
    assert last["steps"] == run.steps_total
    assert last["least_ess"] == min(run.ess.min(), run.ess_tail.min()) >= last["target_ess"] == 300
    assert last["largest_rhat"] == run.rhat.max() <= last["target_rhat"] == 1.01


# ---- bad arguments


def test_wrong_snooker_is_refused_with_the_reason():
    from emcee.moves import DEMove, DESnookerMove

    for moves in (DESnookerMove(), [(DEMove(), 0.8), (DESnookerMove(), 0.2)], [DEMove(), DESnookerMove()]):
        with pytest.raises(ValueError, match=r"samples the wrong distribution.*unit vector.*Leave it out"):
            fixed_run(moves=moves)


def test_mended_snooker_is_accepted(monkeypatch):
    import emcee
    from emcee.moves import DESnookerMove

    monkeypatch.setattr(emcee, "__version__", "3.1.7")
    assert advance.checked_moves(DESnookerMove())[0][1] == 1.0


@pytest.mark.parametrize("version", ["3.1.6", "3.1.5", "3.0.2", "3.1.6.dev1+g0"])
def test_versions_with_the_wrong_snooker(monkeypatch, version):
    import emcee
    from emcee.moves import DESnookerMove

    monkeypatch.setattr(emcee, "__version__", version)
    with pytest.raises(ValueError, match="wrong distribution"):
        advance.checked_moves(DESnookerMove())


@pytest.mark.parametrize("moves", ["stretch", [("a", 1.0)], 3, [[]]])
def test_what_is_no_move_is_refused(moves):
    with pytest.raises(ValueError, match="moves must be emcee moves"):
        fixed_run(moves=moves)


def test_weights_must_be_positive_and_some_move_there():
    from emcee.moves import DEMove

    with pytest.raises(ValueError, match="positive weight"):
        fixed_run(moves=[(DEMove(), 0.0)])
    with pytest.raises(ValueError, match="moves is empty"):
        fixed_run(moves=[])


def test_bad_start_is_named():
    points = starts()
    points[2, 5, 0] = -0.5
    points[:, :, 0] = np.abs(points[:, :, 0])
    points[2, 5, 0] *= -1
    with pytest.raises(ValueError, match=r"walker 5 in ensemble 2 is nan \(x0 = -0.5, .*1 of 16 walkers"):
        fixed_run(half_gaussian_nan, points)
    points[2, 5, 0] = np.inf
    with pytest.raises(
        ValueError, match="x0 of walker 5 in ensemble 2 is inf; every start must be a finite number"
    ):
        fixed_run(points=points)


def test_exception_at_the_starts_comes_through():
    points = starts()
    points[0, 0, 0] = -1.0
    with pytest.raises(ArithmeticError, match="negative thickness"):
        fixed_run(half_gaussian_raising, points)


@pytest.mark.parametrize(
    ("shape", "message"),
    [
        ((4, 15, 3), "15 walkers per ensemble; it takes an even number"),
        ((4, 4, 3), "4 walkers per ensemble.*6 or more"),
        ((16, 3), r"shape \(ensembles, walkers, 3\), not \(16, 3\)"),
        ((0, 16, 3), r"not \(0, 16, 3\)"),
        ((4, 16, 2), "names must be 2 different names"),
    ],
)
def test_bad_shapes(shape, message):
    with pytest.raises(ValueError, match=message):
        fixed_run(points=np.random.default_rng(0).normal(size=shape), names=names(3))


def test_walkers_in_a_plane_are_refused():
    points = starts()
    points[1, :, 2] = 7.0
    with pytest.raises(ValueError, match=r"walkers of ensemble 1 do not differ in x2.*scatter"):
        fixed_run(points=points)
    points[1, :, 2] = points[1, :, 0] + points[1, :, 1]
    with pytest.raises(ValueError, match="walkers of ensemble 1 lie in a plane"):
        fixed_run(points=points)


@pytest.mark.parametrize(
    ("setting", "message"),
    [
        ({"names": ("a", "b", "b")}, "names must be 3 different names"),
        ({"names": "abc"}, "names must be 3 different names"),
        ({"seed": -1}, "seed must be a whole number"),
        ({"seed": None}, "seed must be a whole number"),
        ({"seed": True}, "seed must be a whole number"),
        ({"seed": np.random.default_rng(1)}, "seed must be a whole number"),
        ({"chunk": 0}, "chunk must be a whole number of steps, at least 1, not 0"),
        ({"steps": 2.5}, "max_steps must be a whole number"),
        ({"rhat": 1.0}, "rhat must be above 1"),
        ({"progress": "yes"}, "progress must be True, False or a function"),
        ({"executor": 2}, r"something with submit\(\), not 2"),
        ({"memory": 0.0}, "memory must be a positive number of megabytes"),
    ],
)
def test_bad_settings(setting, message):
    with pytest.raises(ValueError, match=message):
        fixed_run(**setting)


def test_ess_must_be_positive():
    with pytest.raises(ValueError, match="ess must be a positive number"):
        run_ensembles(gaussian, starts(), seed=1, names=names(), ess=0)


def test_wrong_return_shape_is_refused():
    with pytest.raises(ValueError, match=r"log_prob returned shape \(16, 1\) for points of shape \(16, 3\)"):
        fixed_run(lambda points: gaussian(points)[:, None])

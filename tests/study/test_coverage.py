"""The coverage check: it passes what is right, and finds what is wrong, in statistics and in book-keeping."""

import json
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np
import pytest
from aluminium_on_silicon import AL, AL_HOT, SETUP, SI, FromModel, split_problem, split_trace, stack
from scipy import stats

import inverse as inv
from inverse.inference.mcmc.executor import worker_pool
from inverse.inference.problem.parameters import parameters
from inverse.plot.coverage_figure import coverage as picture
from inverse.study.coverage import check as coverage
from inverse.study.coverage.check import check_coverage, check_known
from inverse.study.coverage.judgement import Replicate, Sampling
from inverse.study.coverage.outcome import Coverage
from inverse.study.coverage.ranks import DRAWS, rank_of
from inverse.study.coverage.replicates import draw_traces, draw_truth, quantities, with_data
from inverse.study.coverage.store import Store

LEVELS = (0.5, 0.68, 0.9, 0.95)


def normal_rows(count, seed, width=1.0, shift=0.0):
    """Replicates of a mean with unit prior and unit noise; the posterior is N(y / 2, 1/2) if done right."""
    rng = np.random.default_rng(seed)
    rows = []
    for number in range(count):
        truth = rng.standard_normal()
        data = truth + rng.standard_normal()
        draws = data / 2 + np.sqrt(0.5) * (shift + width * rng.standard_normal(DRAWS))
        rank = {"mean": rank_of(truth, draws, rng)}
        rows.append(Replicate(number, "converged", "mcmc", "", {"mean": truth}, rank, {}, {}, 0.0))
    return tuple(rows)


@pytest.fixture(scope="module")
def short():
    """A trace with thickness and white noise unknown."""
    delay = np.concatenate([np.arange(-4, 3, 0.25), np.arange(3, 45, 0.4)])

    def film(thickness):
        joint = inv.Interface(boundary_conductance=100.0)
        return inv.Stack(inv.Layer(AL, thickness=thickness), joint, inv.Substrate(SI))

    clean = inv.simulate(film(50.0), SETUP, delay)["reflectance_change"].values
    noise = 2e-3 * np.abs(clean).max() * np.random.default_rng(0).standard_normal(delay.size)
    trace = inv.make_trace(delay, reflectance_change=clean + noise)
    return inv.Inversion(film(stats.norm(50, 3)), SETUP, trace, time_zero=0.0, noise="white")


def test_passing_with_a_handful_of_replicates_is_said_to_mean_little():
    few, many = (Coverage(normal_rows(count, 1), LEVELS, 0.01) for count in (4, 300))
    assert few.passed and "with so few replicates intervals that hold" in few.verdict
    assert "so few replicates" not in many.verdict


def test_exact_posterior_passes():
    found = Coverage(normal_rows(300, 1), LEVELS, 0.01)
    assert found.passed and found.verdict.startswith("Passed: in 300 replicates")
    # five binomial errors of a share
    assert abs(found.share(0.9) - 0.9) < 5 * np.sqrt(0.09 / 300)


@pytest.mark.parametrize(
    ("error", "fault"),
    [({"width": 0.6}, "too narrow"), ({"width": 1.7}, "too wide"), ({"shift": 0.5}, "too high"),
     ({"shift": -0.5}, "too low")],
)  # fmt: skip
def test_negative_control_wrong_posterior_fails_and_is_told_how(error, fault):
    found = Coverage(normal_rows(300, 2, **error), LEVELS, 0.01)
    assert not found.passed
    assert found.outside == {"mean": fault}
    assert f"mean ({fault})" in found.verdict


def test_budget_is_shared_by_all_quantities():
    rows = tuple(
        replace(r, truth={"a": 0.0, "b": 0.0}, ranks={"a": r.ranks["mean"], "b": r.ranks["mean"]})
        for r in normal_rows(100, 3)
    )
    assert Coverage(rows, LEVELS, 0.01).bands.failure == pytest.approx(0.005)


def test_failed_replicates_are_counted_and_fail_the_check():
    rows = [
        *normal_rows(100, 4),
        Replicate(100, "failed", "", "ValueError: broken", {"mean": 0.0}, {}, {}, {}, 0.0),
    ]
    found = Coverage(tuple(rows), LEVELS, 0.01)
    assert not found.passed and not found.outside
    assert "1 gave no draws, so the check fails. First: ValueError: broken" in found.verdict


def test_unconverged_replicates_are_counted_and_told():
    rows = list(normal_rows(100, 5))
    rows[7] = replace(rows[7], status="not converged")
    found = Coverage(tuple(rows), LEVELS, 0.01)
    assert len(found.ranks["mean"]) == 100
    assert "1 did not reach the sampling target; their ranks are counted." in found.verdict


def test_check_without_any_draws_says_the_first_error():
    found = Coverage((Replicate(0, "failed", "", "ValueError: no", {}, {}, {}, {}, 0.0),), LEVELS, 0.01)
    assert found.verdict == "Failed: none of 1 replicates gave draws. First error: ValueError: no"
    with pytest.raises(ValueError, match="nothing to draw"):
        picture(found)


def test_table_has_a_row_per_quantity_and_what_is_admitted():
    lines = Coverage(normal_rows(100, 6), LEVELS, 0.01).table().splitlines()
    assert [line.split("|")[1].strip() for line in lines] == ["quantity", "---", "mean", "admitted"]
    assert len({line.count("|") for line in lines}) == 1


def test_picture_draws_the_ranks_and_the_bands():
    found = Coverage(normal_rows(200, 7, width=0.5), LEVELS, 0.01)
    axes = picture(found).axes[0]
    step = next(line for line in axes.lines if len(line.get_ydata()) == DRAWS)
    place = np.arange(1, DRAWS + 1) / (DRAWS + 1)
    expected = [(found.ranks["mean"] < k).mean() for k in range(1, DRAWS + 1)] - place
    np.testing.assert_allclose(step.get_ydata(), expected, atol=1e-12)
    assert [text.get_text() for text in axes.texts] == ["mean", "too narrow"]


def test_truths_follow_the_priors_within_the_limits(short):
    rng = np.random.default_rng(8)
    values = np.array([draw_truth(short, rng) for _ in range(2000)])
    for column, prior in zip(values.T, short.priors.values(), strict=True):
        assert stats.kstest(column, prior.cdf).pvalue > 1e-3
    assert (values > short.posterior.low).all()


def test_truths_outside_the_limits_are_drawn_again(short):
    problem = with_data(short, [{"reflectance_change": short.trace["reflectance_change"].values}])
    priors = {**short.priors, "Al.thickness": stats.norm(0.0, 5.0)}
    problem.posterior = replace(short.posterior, parameters=parameters(priors))
    thickness = [draw_truth(problem, np.random.default_rng(i))[0] for i in range(40)]
    assert min(thickness) > 0


def test_traces_have_the_covariance_that_the_likelihood_assumes():
    # y ~ N(0, X X' + K): its Mahalanobis square is chi-square; K and the inverse are written out here
    problem = split_problem("A11")
    rng = np.random.default_rng(9)
    values = problem.posterior.parameters.to_values(np.zeros((1, len(problem.names))))[0]
    named = {name: np.array([v]) for name, v in zip(problem.names, values, strict=True)}
    model = problem.posterior.members[0].model
    rows = model.functions(named)["reflectance_change"][0]
    delay = model.delay[model.used]
    white, discrepancy, time = (named[f"noise.{k}"][0] for k in ("white", "discrepancy", "correlation_time"))
    kernel = discrepancy**2 * np.exp(-np.abs(delay[:, None] - delay) / time)
    root = np.linalg.cholesky(rows.T @ rows + kernel + white**2 * np.eye(delay.size))
    count = 200
    traces = np.array([draw_traces(problem, values, rng)[0]["reflectance_change"] for _ in range(count)])
    square = (np.linalg.solve(root, traces[:, model.used].T) ** 2).sum(axis=0)
    assert square.mean() == pytest.approx(delay.size, abs=5 * np.sqrt(2 * delay.size / count))
    assert square.std() == pytest.approx(np.sqrt(2 * delay.size), rel=5 / np.sqrt(2 * count))


def test_only_the_data_are_replaced(short):
    before = short.trace["reflectance_change"].values.copy()
    fresh = with_data(short, [{"reflectance_change": 100 * before}])
    assert fresh.priors == short.priors
    ours, theirs = fresh.posterior.members[0].model, short.posterior.members[0].model
    np.testing.assert_array_equal(ours.coefficient_widths, theirs.coefficient_widths)
    np.testing.assert_array_equal(ours.channels[0].data, 100 * before)
    np.testing.assert_array_equal(fresh.trace["reflectance_change"], 100 * before)
    np.testing.assert_array_equal(theirs.channels[0].data, before)
    np.testing.assert_array_equal(short.trace["reflectance_change"], before)
    assert fresh.parts == (fresh,)


def test_joint_problems_get_data_part_by_part(short):
    joint = inv.Inversion.joint([short, short])
    traces = [{"reflectance_change": np.full(len(short.trace.delay), v)} for v in (1.0, 2.0)]
    fresh = with_data(joint, traces)
    assert [float(p.trace["reflectance_change"][0]) for p in fresh.parts] == [1.0, 2.0]
    assert [m.model.channels[0].data[0] for m in fresh.posterior.members] == [1.0, 2.0]
    rng = np.random.default_rng(1)
    assert len(draw_traces(joint, draw_truth(joint, rng), rng)) == 2


def test_quantities_are_those_of_a_result(short):
    values = np.array([[50.0, 1e-8]])
    assert quantities(short, values)["Al.round_trip"] == pytest.approx(2 * 50 / 6.42)


@pytest.mark.slow
def test_both_ways_of_sampling_rank_the_truth_alike(short):
    walked, weighted = (
        check_coverage(short, seed=3, replicates=1, method=m, progress=False).replicates[0]
        for m in ("mcmc", "importance")
    )
    assert (walked.method, weighted.method) == ("mcmc", "importance")
    assert walked.status == weighted.status == "converged"
    assert walked.truth == weighted.truth
    for name, rank in walked.ranks.items():
        # two ranks among 199 draws of one posterior; five standard errors, effective sizes at least 100
        p = (rank + 1) / (DRAWS + 1)
        assert abs(rank - weighted.ranks[name]) <= 5 * DRAWS * np.sqrt(2 * p * (1 - p) / 100)
        assert weighted.sd[name] == pytest.approx(walked.sd[name], rel=0.35)


def fake_judge(inversion, truth, number, sampling, sequence):
    """A stand-in for sampling; ranks depend on the seed alone."""
    rank = int(np.random.default_rng(sequence).integers(DRAWS + 1))
    return Replicate(number, "converged", "mcmc", "", dict(truth), dict.fromkeys(truth, rank), {}, {}, 0.0)


@pytest.fixture
def quick(monkeypatch):
    monkeypatch.setattr(coverage, "judge", fake_judge)


def test_executor_and_order_do_not_matter(short, quick):
    serial = check_coverage(short, seed=1, replicates=6, progress=False)
    with ThreadPoolExecutor(3) as pool:
        threaded = check_coverage(short, seed=1, replicates=6, executor=pool, progress=False)
    assert serial.replicates == threaded.replicates
    assert [r.number for r in serial.replicates] == list(range(6))
    other = check_coverage(short, seed=2, replicates=6, progress=False)
    assert other.replicates[0].truth != serial.replicates[0].truth


def test_stored_check_goes_on_where_it_was_killed(short, quick, tmp_path):
    path = tmp_path / "check.jsonl"
    whole = check_coverage(short, seed=1, replicates=5, progress=False)
    check_coverage(short, seed=1, replicates=3, store=path, progress=False)
    with path.open("a") as file:
        file.write('{"number": 3, "status": "conv')  # killed while writing
    done = []
    resumed = check_coverage(short, seed=1, replicates=5, store=path, progress=done.append)
    assert resumed.replicates == whole.replicates
    assert [news["done"] for news in done] == [4, 5]
    assert len(path.read_text().splitlines()) == 6
    assert (
        check_coverage(short, seed=1, replicates=5, store=path, progress=False).replicates == whole.replicates
    )


def test_store_of_another_check_is_refused(short, quick, tmp_path):
    path = tmp_path / "check.jsonl"
    check_coverage(short, seed=1, replicates=1, store=path, progress=False)
    with pytest.raises(ValueError, match="belongs to another check: its seed differ"):
        check_coverage(short, seed=2, replicates=1, store=path, progress=False)
    with pytest.raises(ValueError, match="its method differ"):
        check_coverage(short, seed=1, replicates=1, method="importance", store=path, progress=False)


def test_a_store_is_a_file_in_a_folder_that_is_there(short, tmp_path):
    with pytest.raises(ValueError, match="is a folder; give the name of a file in it"):
        check_coverage(short, seed=1, replicates=1, store=tmp_path)
    with pytest.raises(
        ValueError, match=r"The folder '.*nowhere' of the store does not exist; create it first"
    ):
        check_coverage(short, seed=1, replicates=1, store=tmp_path / "nowhere" / "check.jsonl")


def test_file_of_something_else_is_refused(tmp_path):
    path = tmp_path / "notes.txt"
    path.write_text("thickness 60 nm\n")
    with pytest.raises(ValueError, match="is no file of replicates"):
        Store(path, {"seed": 1})
    path.write_text(json.dumps({"seed": 1}) + "\n" + json.dumps({"width": 3}) + "\n")
    with pytest.raises(ValueError, match="is no file of replicates"):
        Store(path, {"seed": 1})


def not_finite(rng, values):
    return {"reflectance_change": np.full(133, np.nan)}


def too_short(rng, values):
    return {"reflectance_change": np.zeros(3)}


def test_replicate_that_cannot_be_fitted_is_a_row(short):
    found = check_coverage(short, seed=1, replicates=1, simulate_trace=not_finite, progress=False)
    assert [r.status for r in found.replicates] == ["failed"]
    assert found.replicates[0].truth and not found.passed


def test_simulator_of_another_shape_is_refused(short):
    with pytest.raises(ValueError, match="'reflectance_change' with one value at each of 133 delays"):
        check_coverage(short, seed=1, replicates=1, simulate_trace=too_short, progress=False)


def test_unusable_arguments_are_refused(short):
    with pytest.raises(ValueError, match="replicates must be a whole number, 1 or more, not 0"):
        check_coverage(short, seed=1, replicates=0)
    with pytest.raises(ValueError, match="budget=2; give a probability"):
        check_coverage(short, seed=1, budget=2)
    with pytest.raises(ValueError, match="choose one of importance, mcmc"):
        check_coverage(short, seed=1, method="gibbs")
    with pytest.raises(ValueError, match="ask for 100 or more"):
        check_coverage(short, seed=1, ess=10)
    with pytest.raises(ValueError, match="progress must be True, False or a function"):
        check_coverage(short, seed=1, replicates=1, progress="bar")
    with pytest.raises(ValueError, match="the problem is joint; check its parts"):
        check_coverage(inv.Inversion.joint([short, short]), seed=1, simulate_trace=too_short)
    with pytest.raises(ValueError, match="There are 1 problems and 0 truths"):
        check_known([short], [], seed=1)


def test_known_truths_are_judged_where_they_are_named(short, quick):
    found = check_known(
        [short, short], [{"Al.thickness": 50.0}, {"Al.thickness": 50.0}], seed=1, progress=False
    )
    assert found.names == ("Al.thickness",)


def test_global_random_state_is_left_alone(short, quick):
    before = np.random.get_state()[1].copy()
    check_coverage(short, seed=1, replicates=2, progress=False)
    np.testing.assert_array_equal(before, np.random.get_state()[1])


def test_sampling_asks_for_enough():
    assert Sampling().ess == 200


@pytest.mark.slow
def test_intervals_of_aluminium_on_silicon_are_calibrated():
    # The full run of 200 replicates is kept in COVERAGE.md.
    with worker_pool() as pool:
        found = check_coverage(
            split_problem("A11"), seed=1, replicates=24, method="importance", executor=pool, progress=False
        )
    assert found.passed, found.verdict
    # all quantities together; their ranks depend on each other, so the error is that of a few
    assert abs(found.share(0.9) - 0.9) < 5 * np.sqrt(0.09 / (24 * 4))


@pytest.mark.slow
def test_negative_control_white_noise_on_drifting_traces_fails():
    problem = split_problem("A11", "white")
    level = problem.priors["noise.white"].median()
    drift = (("noise.discrepancy", level), ("noise.correlation_time", 10.0))
    drifting = FromModel(split_problem("A11"), drift)
    with worker_pool() as pool:
        found = check_coverage(
            problem,
            seed=2,
            replicates=20,
            method="importance",
            simulate_trace=drifting,
            executor=pool,
            progress=False,
        )
    assert not found.passed and not found.failed
    assert found.outside["Al|Si.boundary_conductance"] == "too narrow"


@pytest.mark.slow
def test_negative_control_one_temperature_on_two_temperature_traces_fails():
    problem = split_problem("A11")
    hot = inv.Inversion(stack(AL_HOT, inv.Substrate(SI)), SETUP, split_trace("A11"))
    with worker_pool() as pool:
        found = check_coverage(
            problem, seed=3, replicates=8, method="importance", simulate_trace=FromModel(hot), executor=pool,
            progress=False,
        )  # fmt: skip
    assert not found.passed and not found.failed
    assert found.outside

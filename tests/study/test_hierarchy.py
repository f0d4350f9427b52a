"""The hierarchical sampler against a published posterior, closed forms and its own prior."""

import numpy as np
import pytest
from experiments import monte_carlo_error, normal_experiment
from scipy import stats

from inverse.study.splits.hierarchy import Wafer, sample_hierarchy, sample_normal_hierarchy
from inverse.study.splits.normal_sites import NormalWafer, normal_nodes
from inverse.study.splits.scatter import SplitPriors, cells
from inverse.study.stiffness.tabulated import Tabulated, normal_table, product, trimmed

# Eight schools: data and model (mu ~ N(0, 5), tau ~ half-Cauchy(0, 5)) as in posteriordb, eight_schools_noncentered.
EFFECT = (28, 8, -3, 7, -1, 1, 18, 12)
ERROR = (15, 10, 16, 11, 9, 11, 10, 18)
SCHOOLS = SplitPriors(centre=0, centre_sd=5, between=5, within=0, difference=0)
# Exact by quadrature, stable to 1e-9; posteriordb's own means agree within its Monte Carlo errors.
CENTRE = (4.396821, 3.317704)
SCATTER = (3.597705, 3.219958)
SCATTER_QUANTILES = (0.2464, 2.7487, 9.842)
MEANS = (6.21188, 4.94018, 3.92700, 4.75710, 3.61548, 4.04261, 6.29672, 4.85425)
SDS = (5.59313, 4.67427, 5.26262, 4.78030, 4.65745, 4.82687, 5.07785, 5.29080)


def tabulated(splits):
    return [
        [Wafer(str(i), tuple(map(normal_table, w.mean, w.sd))) for i, w in enumerate(wafers)]
        for wafers in splits
    ]


@pytest.fixture(scope="module")
def schools():
    wafers = [
        Wafer(str(i), (normal_table(y, s),)) for i, (y, s) in enumerate(zip(EFFECT, ERROR, strict=True))
    ]
    return sample_hierarchy([wafers], SCHOOLS, seed=1, draws=30000, wafer_draws=30000)


def agrees(draws, mean, sd, allowed=3.5):
    of_mean, of_sd = monte_carlo_error(draws)
    assert np.all(np.abs(draws.mean(axis=0) - mean) < allowed * of_mean)
    assert np.all(np.abs(draws.std(axis=0) - sd) < allowed * of_sd)


def test_eight_schools_centre_and_scatter(schools):
    agrees(schools.centre[:, 0], *CENTRE)
    agrees(schools.between[:, 0], *SCATTER)


def test_eight_schools_quantiles_of_the_scatter(schools):
    for probability, known in zip((0.05, 0.5, 0.95), SCATTER_QUANTILES, strict=True):
        below = np.mean(schools.between[:, 0] < known)
        assert abs(below - probability) < 3.5 * np.sqrt(probability * (1 - probability) / 30000)


def test_eight_schools_effects(schools):
    agrees(schools.wafers[0], np.array(MEANS), np.array(SDS))


def test_eight_schools_in_closed_form():
    wafers = [NormalWafer(np.array([y]), np.array([s])) for y, s in zip(EFFECT, ERROR, strict=True)]
    drawn = sample_normal_hierarchy([wafers], SCHOOLS, seed=2, draws=30000)
    agrees(drawn.centre[:, 0], *CENTRE)
    agrees(drawn.between[:, 0], *SCATTER)


def test_evidence_of_normal_sites_is_the_joint_normal_density():
    rng = np.random.default_rng(5)
    (wafers,) = normal_experiment(rng, [0.4], wafers=3, sites=2)
    between, within, centre, centre_sd = 0.13, 0.05, 0.1, 0.7
    found = normal_nodes(wafers, np.array([between]), np.array([within]), centre, centre_sd)
    data = np.concatenate([w.mean for w in wafers])
    same_wafer = np.kron(np.eye(3), np.ones((2, 2)))
    noise = np.concatenate([w.sd for w in wafers]) ** 2
    covariance = centre_sd**2 + between**2 * same_wafer + np.diag(noise + within**2)
    joint = stats.multivariate_normal(np.full(6, centre), covariance).logpdf(data)
    assert found.log_evidence[0, 0] == pytest.approx(joint + 6 / 2 * np.log(2 * np.pi), abs=1e-10)
    gain = centre_sd**2 * np.linalg.solve(covariance, np.ones(6))
    assert found.mean[0, 0] == pytest.approx(centre + gain @ (data - centre), abs=1e-10)
    assert found.sd[0, 0] ** 2 == pytest.approx(centre_sd**2 - centre_sd**2 * gain.sum(), abs=1e-10)


def test_tables_and_closed_form_agree_on_a_full_hierarchy():
    splits = normal_experiment(np.random.default_rng(6), [0.0, 0.2], wafers=3, sites=3)
    closed = sample_normal_hierarchy(splits, SplitPriors(), seed=1, draws=40000)
    tables = sample_hierarchy(tabulated(splits), SplitPriors(), seed=2, draws=40000, wafer_draws=0)
    for name in ("centre", "between", "within"):
        a, b = getattr(closed, name), getattr(tables, name)
        error = np.sqrt(2) * monte_carlo_error(a)[0]
        assert np.all(np.abs(a.mean(axis=0) - b.mean(axis=0)) < 4 * error), name
        assert np.allclose(np.quantile(a, [0.1, 0.9], axis=0), np.quantile(b, [0.1, 0.9], axis=0), atol=0.01)


def test_smearing_a_normal_table_adds_variances():
    table, at = normal_table(0.3, 0.1), np.linspace(-0.5, 1.0, 7)
    for scatter in (0.0, 0.004, 0.03, 0.4):
        variance = 0.1**2 + scatter**2
        known = np.log(0.1) - 0.5 * np.log(variance) - 0.5 * (at - 0.3) ** 2 / variance
        near = known > -20
        assert np.allclose(table.smeared(scatter, at)[near], known[near], atol=1e-3)


def test_smearing_keeps_a_plateau():
    step = Tabulated(-1.0, 0.02, np.linspace(0, 0, 51), left=0.0, width=0.1)
    at = np.array([-30.0, -3.0, 0.01, 0.51])
    # The midpoint rule errs by step^2 / 24 times the kernel's steepest slope, 0.242 / 0.5^2.
    allowed = 0.02**2 / 24 * 0.242 / 0.5**2
    assert np.allclose(
        np.exp(step.smeared(0.5, at)), stats.norm.sf((at - 0.01) / 0.5), atol=1.05 * allowed, rtol=0
    )


def test_a_product_of_normal_tables_is_their_weighted_mean():
    found = product([normal_table(0.0, 0.1), normal_table(0.3, 0.2)], 0.0)
    mean, sd = found.moments(found.start, found.end)
    assert mean == pytest.approx(0.3 * 0.2**-2 / (0.1**-2 + 0.2**-2), abs=1e-4)
    assert sd == pytest.approx((0.1**-2 + 0.2**-2) ** -0.5, rel=1e-3)


def test_cells_hold_the_whole_prior():
    made = cells(0.2, 0.01, 0.0, 6.0, 20)
    assert made.prior.sum() == pytest.approx(1)
    assert np.all((made.nodes > made.edges[:-1]) & (made.nodes < made.edges[1:]))
    assert np.allclose(made.transition(0.3).sum(axis=1), 1)
    drawn = made.inside(np.full(5000, 7), np.random.default_rng(0))
    assert made.edges[7] <= drawn.min() and drawn.max() <= made.edges[8]


def test_equal_seeds_give_equal_draws_and_leave_numpy_alone():
    splits = tabulated(normal_experiment(np.random.default_rng(1), [0.0, 0.1]))
    before = np.random.get_state()[1].copy()
    first, second = (sample_hierarchy(splits, SplitPriors(), seed=3, draws=2000) for _ in range(2))
    assert np.array_equal(first.centre, second.centre) and np.array_equal(first.wafers[1], second.wafers[1])
    assert np.array_equal(before, np.random.get_state()[1])


def ranks(rng, seed, table):
    """Ranks of the true centres and scatters among the draws of one experiment made from the priors."""
    priors = SplitPriors(centre=-3.0, centre_sd=0.7, between=0.2, within=0.1, difference=0.3)
    typical = [abs(scale * stats.cauchy.rvs(random_state=rng)) for scale in (0.2, 0.1)]
    splits, truth = [], []
    for _ in range(2):
        between, within = (t * np.exp(0.3 * rng.standard_normal()) for t in typical)
        centre = -3.0 + 0.7 * rng.standard_normal()
        wafers = centre + between * rng.standard_normal(3)
        sites = wafers[:, None] + within * rng.standard_normal((3, 2))
        splits.append([Wafer(str(i), tuple(table(rng, x) for x in row)) for i, row in enumerate(sites)])
        truth.append((centre, between, within))
    drawn = sample_hierarchy(splits, priors, seed=seed, draws=1000, wafer_draws=0)
    columns = (drawn.centre, drawn.between, drawn.within)
    return [np.mean(column[:, s] < truth[s][k]) for s in range(2) for k, column in enumerate(columns)]


def seen_signal(x):
    """A trace's response to a compliance exp(x): proportional to it when small, slower when large."""
    return np.where(x < 0, np.exp(np.minimum(x, 0.0)), 1 + x)


def signal_table(rng, x, sd=0.08):
    """The likelihood of x when the signal is measured with that error: near exp(-3) = 0.05 most set no bound."""
    seen = float(seen_signal(x) + sd * rng.standard_normal())
    best = np.log(max(seen, sd)) if seen < 1 else seen - 1
    width = sd / max(seen, 2 * sd) if seen < 1 else sd
    grid = np.arange(min(best - 9 * width, -7.0), best + 15 * width, width / 5)
    log = -0.5 * ((seen_signal(grid) - seen) / sd) ** 2
    return trimmed(Tabulated(float(grid[0]), width / 5, log, left=-0.5 * (seen / sd) ** 2, width=width))


def uncut_table(rng, x):
    """The same with its plateau denied: what a normal fit to the logarithm's draws would claim."""
    table = signal_table(rng, x)
    return normal_table(*table.moments(table.start, table.end)) if table.left > -4 else table


@pytest.mark.slow
def test_calibration_with_censored_sites():
    """Talts et al. 2018: over experiments drawn from the priors the ranks of the truths are uniform."""
    rng = np.random.default_rng(11)
    seen = np.array([ranks(rng, seed, signal_table) for seed in range(200)])
    assert min(stats.kstest(column, "uniform").pvalue for column in seen.T) > 0.05 / 6


@pytest.mark.slow
def test_calibration_notices_a_denied_plateau():
    """Negative control: the wrong model must fail."""
    rng = np.random.default_rng(11)
    seen = np.array([ranks(rng, seed, uncut_table) for seed in range(200)])
    assert min(stats.kstest(column, "uniform").pvalue for column in seen.T) < 0.05 / 6

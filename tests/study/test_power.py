"""How many more wafers would decide it."""

import numpy as np
import pytest
from experiments import site_draws
from scipy import stats

from inverse.study.splits.compare import compare_splits
from inverse.study.splits.power import comparison_power

COMPLIANCE = "Al|Si.compliance"


@pytest.fixture(scope="module")
def compared():
    rng = np.random.default_rng(12)
    labels, results = {}, {}
    for split, stiffness in (("A", 6.0), ("B", 7.0), ("C", 20.0)):
        for wafer in range(4):
            middle = stiffness * np.exp(0.1 * rng.standard_normal())
            for site in range(2):
                name = f"{split}{wafer}{site}"
                results[name] = site_draws(rng, middle * np.exp(0.03 * rng.standard_normal()))
                labels[name] = {"split": split, "wafer": f"{split}{wafer}"}
    return compare_splits(
        results, quantity=COMPLIANCE, labels=labels, prior=stats.halfcauchy(scale=0.05), seed=1, margin=0.1
    )


def by_hand(wafers, ratio, between=0.1, within=0.03, own=0.02, sites=2):
    """t-test with the freedom of each split's wafers about its own mean, three splits pooled."""
    error = np.sqrt(2 * (between**2 + (within**2 + own**2) / sites) / wafers)
    freedom = 3 * (wafers - 1)
    return stats.nct(freedom, abs(np.log(ratio)) / error).sf(stats.t(freedom).ppf(0.975))


@pytest.mark.slow
def test_power_agrees_with_the_noncentral_t(compared):
    """The third split is far away, so the pair is judged at the full level; the priors cost a few hundredths."""
    study = comparison_power(
        compared,
        "A",
        "B",
        seed=1,
        difference=1.25,
        wafers=(4, 8),
        noise=(1.0,),
        scatter=(0.1, 0.03),
        experiments=300,
    )
    for design in study.designs:
        expected = by_hand(design.wafers, 1.25)
        assert expected - 0.09 - 2.5 * design.error < design.power < expected + 2.5 * design.error


@pytest.mark.slow
def test_more_wafers_decide_more_and_noise_hardly_matters_beside_them(compared):
    study = comparison_power(
        compared, "A", "B", seed=2, difference=1.2, wafers=(3, 12), noise=(1.0, 0.5), experiments=80
    )
    power = {(d.wafers, d.noise): d.power for d in study.designs}
    assert power[12, 1.0] > power[3, 1.0] + 0.2
    assert abs(power[12, 0.5] - power[12, 1.0]) < 0.2
    assert study.shares[0] > 0.8 and sum(study.shares) == pytest.approx(1)


def test_the_smallest_sufficient_design_is_named(compared):
    study = comparison_power(
        compared, "A", "C", seed=3, wafers=(12, 3), noise=(1.0,), scatter=(0.1, 0.03), experiments=20
    )
    assert study.sufficient[0].wafers == 3
    assert "3 wafers a split, 2 sites a wafer and 1 times the present noise decide it" in study.verdict[0]
    hopeless = comparison_power(
        compared, "A", "B", seed=3, difference=1.001, wafers=(3,), noise=(1.0,), experiments=20
    )
    assert "no design here decides it" in repr(hopeless)


def test_equal_seeds_give_equal_studies(compared):
    first, second = (
        comparison_power(compared, "A", "B", seed=4, wafers=(4,), noise=(1.0,), experiments=20)
        for _ in range(2)
    )
    assert first == second


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"difference": 0.0}, r"difference=0.0; give a ratio above zero"),
        ({"wafers": (0,)}, r"wafers=\(0,\).*give one wafer or more"),
        ({"target": 1.0}, "target=1.0; give a probability"),
        ({"experiments": 3}, "experiments must be a whole number, 20 or more, not 3"),
        ({"second": "D"}, "there is no split 'D'"),
    ],
)
def test_what_is_refused(compared, change, message):
    with pytest.raises(ValueError, match=message):
        comparison_power(compared, "A", change.pop("second", "B"), seed=1, **change)

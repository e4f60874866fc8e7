"""Statistics against published tables, closed forms, SciPy and small simulations."""

import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from sklearn.calibration import calibration_curve

from learnfilter.ablation.statistics import (
    Interval,
    bootstrap,
    calibration_error,
    coverage,
    debiased_calibration_error,
    holm,
    mcnemar_exact,
    paired_bootstrap,
    site_means,
    sites_needed,
    wilson,
)
from learnfilter.core.errors import ShapeError
from learnfilter.core.estimate import credible_rank
from learnfilter.core.seeds import stream


def rng(name="statistics"):
    return stream(11, "tests", name)


# --- shares -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_agrees_with_newcombe(k, n, low, high):
    """Newcombe, Stat. Med. 17:857-872, 1998, table I (four decimals, hence 5e-5)."""
    interval = wilson(k, n)
    assert (low, high) == pytest.approx((interval.low, interval.high), abs=5e-5)


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [(7, 50, 0.069508, 0.261862), (90, 100, 0.825634, 0.944771), (50, 100, 0.403832, 0.596168)],
)
def test_wilson_agrees_with_wilson(k, n, low, high):
    """Wilson 1927, from the formula to six decimals; Clopper-Pearson (7/50: .0582-.2674) would fail."""
    interval = wilson(k, n)
    assert (low, high) == pytest.approx((interval.low, interval.high), abs=1e-6)


@pytest.mark.parametrize("n", [1, 10, 1000])
def test_wilson_at_the_ends_has_its_closed_form(n):
    """Upper bound of 0/n is z^2 / (n + z^2); n/n mirrors it."""
    z = 1.959964
    none, every = wilson(0, n), wilson(n, n)
    # 1e-6: z is given to six decimals
    assert (0, z**2 / (n + z**2)) == pytest.approx((none.low, none.high), abs=1e-6)
    assert (n / (n + z**2), 1) == pytest.approx((every.low, every.high), abs=1e-6)


@given(st.integers(1, 200), st.data())
def test_wilson_agrees_with_scipy(n, data):
    """scipy.stats.binomtest(...).proportion_ci("wilson"), any share, two levels."""
    k, level = data.draw(st.integers(0, n)), data.draw(st.sampled_from([0.8, 0.95]))
    expected = stats.binomtest(k, n).proportion_ci(level, method="wilson")
    interval = wilson(k, n, level)
    # 1e-9 leaves room for the order of operations only
    assert (expected.low, expected.high) == pytest.approx((interval.low, interval.high), abs=1e-9)


def test_a_share_of_nothing_is_no_number():
    """JSON gets null, not NaN."""
    assert json.dumps(wilson(0, 0).as_dict()) == '{"value": null, "low": null, "high": null, "n": 0}'


# --- paired tests -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("b", "c", "expected"),
    [
        (5, 15, 0.0413894653),
        (0, 6, 0.03125),
        (1, 9, 0.0214843750),
        (10, 10, 1.0),
        (0, 0, 1.0),
        (15, 5, 0.0413894653),
    ],
)
def test_mcnemar_is_the_binomial(b, c, expected):
    """McNemar 1947 in its exact form: two-sided binomial, counted by hand (ten decimals)."""
    assert expected == pytest.approx(mcnemar_exact(b, c), abs=1e-10)


def test_holm_steps_down():
    """Holm 1979: p (i) times (m - i + 1), never falling, never above one; worked by hand."""
    np.testing.assert_allclose(holm([0.01, 0.04, 0.03, 0.005]), [0.03, 0.06, 0.06, 0.02])
    np.testing.assert_allclose(holm([0.9, 0.6]), [1.0, 1.0])


@given(st.lists(st.floats(0, 1), min_size=1, max_size=8))
def test_holm_lies_between_none_and_bonferroni(p):
    """Never below the raw value, never above m times it."""
    adjusted = holm(p)
    assert np.all(adjusted >= p) and np.all(adjusted <= np.minimum(1, np.multiply(len(p), p)) + 1e-15)


# --- bootstrap ----------------------------------------------------------------------------------


def test_one_drive_a_site_is_the_plain_bootstrap():
    """scipy.stats.bootstrap, percentile method, on the same differences."""
    a, b = rng("a").normal(1.0, 1, 40), rng("b").normal(0.5, 1, 40)
    expected = stats.bootstrap((a - b,), np.mean, n_resamples=20_000, method="percentile", rng=rng("scipy"))
    interval = paired_bootstrap(a, b, np.arange(40), rng=rng(), n=20_000)
    bounds = expected.confidence_interval
    # 0.02: a quantile at 2.5 % of 20,000 means of spread 0.22 has a standard error of 0.004, twice, times 3
    assert (bounds.low, bounds.high) == pytest.approx((interval.low, interval.high), abs=0.02)
    assert ((a - b).mean(), 40) == pytest.approx((interval.value, interval.n))


def test_sites_count_alike_whatever_their_number_of_drives():
    """Site means 0 and 1: one half, although nine of ten drives are at 1; drives weigh alike likewise."""
    interval = bootstrap([0] + [1] * 9, ["a"] + ["b"] * 9, rng=rng())
    assert (interval.value, interval.n) == (0.5, 2)
    assert site_means([0, 1, 1, 1], ["a"] * 4, [0, 1, 1, 1]) == pytest.approx([0.5])


def test_repeated_drives_do_not_narrow_the_interval():
    """A hundred copies of every drive are no new evidence."""
    values = rng("values").normal(size=12)
    once = bootstrap(values, np.arange(12), np.zeros(12), rng=rng())
    copies = bootstrap(np.repeat(values, 100), np.repeat(np.arange(12), 100), np.zeros(1200), rng=rng())
    assert (once.low, once.high) == pytest.approx((copies.low, copies.high))


def test_the_hierarchical_bootstrap_covers():
    """95 % intervals hold the true mean about that often: 15 sites of spread 1, 1 to 6 drives of spread 1.

    Resampling both levels adds a little spread, few sites take a little away, so 0.91 to 1 of 300
    (binomial standard error 0.013) passes; a bootstrap over drives alone covers 0.73 here.
    """
    source = rng("coverage")
    hits = []
    for _ in range(300):
        counts = source.integers(1, 7, 15)
        site = np.repeat(np.arange(15), counts)
        values = 2 + source.normal(size=15)[site] + source.normal(size=len(site))
        interval = bootstrap(values, site, rng=source, n=300)
        hits.append(interval.low <= 2 <= interval.high)
    assert 0.91 <= np.mean(hits) <= 1


def test_drives_within_a_site_are_resampled():
    """Two sites with the same mean but drives that differ: the interval has a width."""
    interval = bootstrap([0, 1, 0, 1], [0, 0, 1, 1], rng=rng())
    # closed form: the mean of four fair coins is 0 or 1 with chance 1/16 each, more than 2.5 %
    assert (interval.value, interval.low, interval.high) == (0.5, 0.0, 1.0)


def test_unknown_results_are_left_out():
    """NaN rows neither count as zero nor keep their site alive."""
    interval = bootstrap([1.0, math.nan, 3.0, math.nan], ["a", "a", "b", "c"], rng=rng())
    assert (interval.value, interval.n) == (2.0, 2)


@pytest.mark.parametrize(("values", "expected"), [([], 0), ([2.0, 3.0], 1)])
def test_fewer_than_two_sites_give_no_interval(values, expected):
    """One site says nothing of the next."""
    interval = bootstrap(values, [0] * len(values), rng=rng())
    assert expected == interval.n and math.isnan(interval.low) and math.isnan(interval.high)


def test_the_same_seed_gives_the_same_interval():
    """Randomness is an argument."""
    values, site = rng("v").normal(size=9), [0, 0, 0, 1, 1, 1, 2, 2, 2]
    assert bootstrap(values, site, rng=rng()) == bootstrap(values, site, rng=rng())
    assert bootstrap(values, site, rng=rng()) != bootstrap(values, site, rng=rng("another"))


def test_labels_must_match_the_values():
    """A label a row."""
    with pytest.raises(ShapeError, match="site"):
        bootstrap([1.0, 2.0], [0], rng=rng())


def test_an_interval_is_plain_values():
    """For summary.json."""
    assert Interval(1.0, 0.5, 2.0, 3).as_dict() == {"value": 1.0, "low": 0.5, "high": 2.0, "n": 3}


# --- how many more ------------------------------------------------------------------------------


@pytest.mark.parametrize(("count", "scale"), [(3, 0.8), (4, 0.8), (10, 5.0)])
def test_sites_needed_is_the_least_that_clears(count, scale):
    """With the mean and spread seen, Student's interval clears at that number and not one below."""
    differences = 1 + scale * np.linspace(-1, 1, count)
    margin, spread = 0.2, differences.std(ddof=1)

    def low(sites):
        return stats.t.interval(0.95, sites - 1, 1.0, spread / math.sqrt(sites))[0]

    total = count + sites_needed(differences, margin)
    assert low(total) >= margin > low(total - 1)


def test_no_more_sites_are_needed_where_it_is_clear():
    """Either sign, and no spread at all."""
    assert [sites_needed(d) for d in ([5.0, 5.1, 4.9, 5], [-5.0, -5.1, -4.9, -5], [1.0, 1.0])] == [0, 0, 0]


@pytest.mark.parametrize(
    ("differences", "margin"), [([1.0], 0), ([], 0), ([1.0, -1.0], 0), ([0.1, 0.2], 0.5)]
)
def test_no_number_of_sites_helps_a_mean_inside_the_margin(differences, margin):
    """Nor can one site tell its spread."""
    assert sites_needed(differences, margin) is None


# --- calibration --------------------------------------------------------------------------------


def test_calibration_of_the_two_bin_example():
    """The widely quoted example of binned errors .29, .2918333 (root mean square), .3166667 (worst)."""
    error = calibration_error([0.25, 0.25, 0.55, 0.75, 0.75], [0, 0, 1, 1, 1], n_bins=2)
    assert (error.mean, error.rms, error.worst) == pytest.approx((0.29, 0.2918333, 0.3166667), abs=1e-6)


def test_calibration_of_the_ten_bin_example():
    """Guo et al. 2017, definition: .5 x .136 + .4 x .24 + .1 x .45."""
    confidence = [0.95, 0.92, 0.91, 0.97, 0.93, 0.75, 0.72, 0.78, 0.71, 0.55]
    error = calibration_error(confidence, [1, 1, 1, 1, 0, 1, 0, 1, 0, 1])
    assert (error.mean, error.worst) == pytest.approx((0.209, 0.45), abs=1e-9)


def test_worst_bin_agrees_with_scikit_learn():
    """sklearn.calibration.calibration_curve on random confidences."""
    confidence = rng("confidence").random(500)
    correct = rng("correct").random(500) < confidence**2
    right, stated = calibration_curve(correct, confidence, n_bins=8)
    error = calibration_error(confidence, correct, n_bins=8)
    assert np.abs(right - stated).max() == pytest.approx(error.worst, abs=1e-12)


def calibrated(n, source):
    confidence = source.random(n)
    return confidence, source.random(n) < confidence


def test_debiasing_removes_what_chance_shows():
    """Kumar, Liang, Ma 2019: on calibrated samples of 60 the plain error averages far above the debiased one.

    In 10 bins of 6 the plain root mean square error is about sqrt(mean p(1-p) / 6) = sqrt(1/36) = 0.17.
    """
    source = rng("debias")
    pairs = [calibrated(60, source) for _ in range(200)]
    plain = np.mean([calibration_error(*pair).rms for pair in pairs])
    debiased = np.mean([debiased_calibration_error(*pair) for pair in pairs])
    # the debiased square averages 0, its root is cut off at 0: measured 0.05 against 0.16
    assert plain == pytest.approx(1 / 6, abs=0.03)
    assert debiased < plain / 2.5


def test_debiased_error_finds_a_constant_gap():
    """Confidence stated 0.2 too high everywhere, 20,000 samples: 0.2 (standard error 0.003, times 3)."""
    truth, correct = calibrated(20_000, rng("gap"))
    assert debiased_calibration_error(truth + 0.2, correct) == pytest.approx(0.2, abs=0.01)


def test_debiased_error_of_a_hand_case():
    """Two bins of two at confidence .5: right 1 and 2, (2 (0 - .25) + 2 (.25 - 0)) / 4 = 0; all right, .5."""
    assert debiased_calibration_error([0.5] * 4, [0, 1, 1, 1], n_bins=2) == 0.0
    assert debiased_calibration_error([0.5] * 4, [1, 1, 1, 1], n_bins=2) == 0.5


def test_debiasing_needs_two_samples_a_bin():
    """One sample has no spread to subtract."""
    with pytest.raises(ValueError, match="at least 20 samples, got 19"):
        debiased_calibration_error(np.full(19, 0.5), np.ones(19))


@pytest.mark.parametrize("belief", [[0.5, 0.3, 0.2], [0.25] * 4, [0.7, 0.1, 0.1, 0.1, 0.0]])
def test_ranks_of_a_calibrated_belief_are_uniform(belief):
    """Truth drawn from the belief itself: Kolmogorov-Smirnov finds nothing in 2000 ranks, ties or not."""
    source = rng("ranks")
    truths = source.choice(len(belief), p=belief, size=2000)
    ranks = [credible_rank(belief, (truth,), source) for truth in truths]
    # seeded, so this is no lottery; a plain rank without the random split gives p < 1e-100
    assert stats.kstest(ranks, "uniform").pvalue > 0.01


def test_a_pose_held_impossible_has_rank_one():
    """Only the whole belief reaches it."""
    assert credible_rank(np.array([[0.5, 0.5], [0.0, 0.0]]), (1, 0), rng()) == 1.0


def test_coverage_counts_the_sets_that_hold_the_truth():
    """Three of four ranks within 0.9, with Wilson's interval."""
    assert wilson(3, 4) == coverage([0.1, 0.5, 0.9, 0.95], level=0.9)

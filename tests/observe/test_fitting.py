"""Fitting the mixture: expectation maximisation's laws, and parameters that are known."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy import stats

from learnfilter.core.scale import RangeScale
from learnfilter.observe.fitting import Pairs, Sample, fit_mixture, gather_pairs
from learnfilter.observe.mixture import RangeMixture
from tests.contracts.small import LAYOUT, PER_HEADING, altered, small_site

MAX_M = 10.0
SCALE = RangeScale(0.05, 0.02, MAX_M)


def pairs_of(measured, expected):
    """Depth-only pairs."""
    measured = np.asarray(measured, float)
    nothing = np.full((len(measured), 3), np.nan)
    return Pairs(
        measured, np.broadcast_to(expected, measured.shape), nothing, nothing, np.zeros(len(measured), int)
    )


def drawn(count, seed=0):
    """Readings by a known mixture: shares (0.7, 0.12, 0.1, 0.08), hit 0.2 m wide, short 0.5 a metre."""
    rng = np.random.default_rng(seed)
    r = rng.uniform(1, 7, count)
    cause = rng.choice(4, size=count, p=[0.7, 0.12, 0.1, 0.08])
    hit = stats.truncnorm.rvs(-r / 0.2, np.inf, r, 0.2, random_state=rng)
    short = stats.truncexpon.rvs(0.5 * r, scale=2, random_state=rng)
    z = np.select([cause == 0, cause == 1, cause == 2], [hit, short, np.nan], rng.uniform(0, MAX_M, count))
    return pairs_of(z, r)


def test_disjoint_causes_are_told_apart_in_one_round():
    """Three of ten nothing, seven stray: shares (0.3, 0.7) from any interior start.  The fit keeps 1e-4 for
    each of the two other causes."""
    start = RangeMixture(0, 0, 0.5, 0.5)
    found = fit_mixture(pairs_of([np.nan] * 3 + [1, 2, 3, 5, 6, 7, 8], 4.0), SCALE, start, 1).mixture
    assert_allclose((found.none_share, found.stray_share), (0.3, 0.7), atol=2e-4)


def test_one_round_shares_the_blame_as_bayes_says():
    """Responsibilities by SciPy's truncated distributions over the same bins."""
    z = np.array([4, 4.1, 3.9, 4.05, 1, 2, 7, 9])
    start = RangeMixture(0.25, 0.25, 0.25, 0.25, hit_spread_m=0.5, hit_growth_per_m=0, short_rate_per_m=0.3)
    found = fit_mixture(pairs_of(np.append(z, [np.nan, np.nan]), 4.0), SCALE, start, 1).mixture

    def node(i):
        return 0.05 * np.expm1(0.02 * i) / 0.02

    near = np.rint(np.log1p(0.02 * z / 0.05) / 0.02)
    expected_m = node(np.rint(np.log1p(0.02 * 4 / 0.05) / 0.02))  # the fit works on nodes
    laws = (
        stats.truncnorm(-expected_m / 0.5, np.inf, expected_m, 0.5),
        stats.truncexpon(0.3 * expected_m, scale=1 / 0.3),
        stats.uniform(0, MAX_M),
    )
    masses = np.array([law.cdf(node(near + 0.5)) - law.cdf(node(near - 0.5)) for law in laws])
    hit, short, stray = (masses / masses.sum(axis=0)).sum(axis=1) / 10
    shares = (found.hit_share, found.short_share, found.none_share, found.stray_share)
    assert_allclose(shares, (hit, short, 0.2, stray), atol=1e-9)


def test_likelihood_never_falls():
    """Dempster, Laird, Rubin 1977; rounding of a mean of logarithms apart."""
    trace = fit_mixture(drawn(3000), SCALE, RangeMixture(), 25).log_likelihood
    assert len(trace) > 5
    assert np.diff(trace).min() > -1e-9


def test_known_parameters_are_found_again():
    """20,000 readings: four binomial standard errors on shares (0.013); spread and rate within 5 %, the
    width of the bins near 4 m being 0.13 m."""
    start = RangeMixture(hit_growth_per_m=0.0)
    found = fit_mixture(drawn(20_000), SCALE, start).mixture
    shares = (found.hit_share, found.short_share, found.none_share, found.stray_share)
    assert_allclose(shares, (0.7, 0.12, 0.1, 0.08), atol=0.013)
    assert_allclose(found.hit_spread_m, 0.2, rtol=0.05)
    assert_allclose(found.short_rate_per_m, 0.5, rtol=0.15)


def test_weights_count_expected_ranges():
    """One count a node is added, so that no background is zero."""
    weight = fit_mixture(
        pairs_of([4, 4, np.nan], [4.0, 4.0, np.inf]), SCALE, RangeMixture(), 1
    ).expected_weight
    assert_allclose(np.sort(weight)[-2:], [2, 3])
    assert weight[-1] == 2


def one_sample(**members):
    """A strip taken at one pose whose depths are the numbers of its positions."""
    site = altered(small_site(), **members)
    depth = np.arange(LAYOUT.columns, dtype=float)[None]
    rgb = np.full((1, LAYOUT.columns, 3), 0.5)
    return Sample(site, depth, rgb, np.array([7]), np.array([5]))


def test_pairs_match_columns_with_the_rays_they_look_along():
    """Position w at heading 5 looks along ring bearing 5 K + first + w, counted round the ring."""
    site = altered(small_site(), unsure=np.zeros_like(small_site().unsure))
    pairs = gather_pairs([one_sample(unsure=site.unsure)])
    for w in range(LAYOUT.columns):
        assert pairs.expected_m[w] == site.range_m[7, (5 * PER_HEADING + LAYOUT.first + w) % LAYOUT.bearings]


def test_unsure_rays_are_left_out():
    """Half the ring unsure: half the pairs."""
    unsure = np.zeros_like(small_site().unsure)
    unsure[:, : LAYOUT.bearings // 2] = True
    assert len(gather_pairs([one_sample(unsure=unsure)]).measured_m) == LAYOUT.columns // 2


def test_unknown_finishes_are_nan():
    """Known ones carry the palette's linear colour."""
    finish = np.full_like(small_site().finish, -1)
    finish[:, ::2] = 1
    pairs = gather_pairs([one_sample(finish=finish, unsure=np.zeros_like(small_site().unsure))])
    known = np.isfinite(pairs.finish_rgb).all(axis=1)
    assert known.sum() == LAYOUT.columns // 2
    assert_array_equal(np.unique(pairs.finish_rgb[known], axis=0), small_site().palette[1:2])


@pytest.mark.parametrize("count", [1, 3])
def test_every_strip_has_its_own_number(count):
    """Across samples too: a strip's columns share its light."""
    pairs = gather_pairs([one_sample()] * count)
    assert_array_equal(np.unique(pairs.strip), np.arange(count))

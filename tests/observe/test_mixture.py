"""The range mixture against SciPy's truncated distributions and hand-integrated bins."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats
from scipy.integrate import quad

from learnfilter.core.errors import ConfigError
from learnfilter.core.scale import RangeScale
from learnfilter.observe.mixture import (
    RangeMixture,
    bin_masses,
    component_cdfs,
    component_masses,
    log_ratio_table,
)

# Of the worked values: z_max 10 m, hit 0.5 m wide, short 0.3 a metre (Thrun, Burgard, Fox 2005, 6.3)
MIXTURE = RangeMixture(0.7, 0.1, 0.05, 0.15, hit_spread_m=0.5, hit_growth_per_m=0.0, short_rate_per_m=0.3)
MAX_M = 10.0
METRES = RangeScale(1.0, 1e-9, MAX_M)  # growth this small leaves nodes a metre apart to 1e-8
ROUNDING = 1e-12


@pytest.mark.parametrize("expected_m", [0.2, 4.0, 9.8])
def test_hits_are_a_normal_distribution_cut_at_zero(expected_m):
    """SciPy's truncnorm with no upper end: what lies beyond the maximum did not come back."""
    z = np.linspace(0, MAX_M, 41)
    hit, _, _ = component_cdfs(z, expected_m, MIXTURE, MAX_M)
    assert_allclose(hit, stats.truncnorm(-expected_m / 0.5, np.inf, expected_m, 0.5).cdf(z), atol=ROUNDING)


@pytest.mark.parametrize("expected_m", [0.2, 4.0, 9.8])
def test_short_readings_are_an_exponential_cut_at_the_expected_range(expected_m):
    """SciPy's truncexpon."""
    z = np.linspace(0, MAX_M, 41)
    _, short, _ = component_cdfs(z, expected_m, MIXTURE, MAX_M)
    assert_allclose(short, stats.truncexpon(0.3 * expected_m, scale=1 / 0.3).cdf(z), atol=ROUNDING)


def test_the_mean_short_reading_shows_the_cut():
    """1 / rate - r / (e^(rate r) - 1) = 1.6092822906 m; without the cut it would be 3.33 m."""
    mean, _ = quad(lambda z: 1 - float(component_cdfs(z, 4.0, MIXTURE, MAX_M)[1]), 0, 4)
    assert_allclose(mean, 1.6092822906, atol=1e-9)


def metre_bins(component):
    """Masses between whole metres: differences of the component's distribution function."""
    return np.diff(component_cdfs(np.arange(11.0), 4.0, MIXTURE, MAX_M)[component])


def test_metre_bins_of_the_components_have_the_worked_masses():
    """Integrals of the densities over whole metres, to the printed digits; stray is even."""
    assert_allclose(metre_bins(0)[2:6], [0.02271846, 0.47724987, 0.47724987, 0.02271846], atol=1e-8)
    assert_allclose(metre_bins(1)[:5], [0.37089243, 0.27476387, 0.20355008, 0.15079361, 0], atol=1e-8)
    assert_allclose(metre_bins(2), np.full(10, 0.1), atol=ROUNDING)


@pytest.mark.parametrize(
    ("z", "expected"),
    [(0.5, 0.05195052), (2.0, 0.03874806), (3.5, 0.36878198), (4.5, 0.35375901), (6.0, 0.01518736)],
)
def test_the_density_of_the_mixture_has_the_worked_values(z, expected):
    """Slope of its distribution function; a central difference over 2e-4 m errs by about 1e-8 here."""
    ends = [component_cdfs(z + d, 4.0, MIXTURE, MAX_M) for d in (-1e-4, 1e-4)]
    slopes = [float(b - a) / 2e-4 for a, b in zip(*ends, strict=True)]
    assert_allclose(np.dot(slopes, [0.7, 0.1, 0.15]), expected, atol=1e-7)


@pytest.mark.parametrize("scale", [METRES, RangeScale(0.05, 0.02, MAX_M), RangeScale(0.15, 0.06, 6.0)])
@pytest.mark.parametrize("mixture", [MIXTURE, RangeMixture()])
def test_bin_masses_sum_to_one(scale, mixture):
    """For every expected range, the nearest, the farthest and 'nothing' included."""
    expected = np.append(np.linspace(0, scale.max_range_m, 30), np.inf)
    assert_allclose(bin_masses(scale, expected, mixture).sum(axis=1), 1, atol=1e-9)


def test_bins_reach_half_way_to_the_neighbouring_nodes():
    """On even nodes bin i holds [i - 1/2, i + 1/2] metres: masses by SciPy's truncnorm."""
    masses = component_masses(METRES, [4.0], MIXTURE)[0, 0]
    edges = np.concatenate([[0], np.arange(10) + 0.5, [MAX_M]])
    assert_allclose(masses[:-1], np.diff(stats.truncnorm(-8, np.inf, 4, 0.5).cdf(edges)), atol=1e-7)


def test_a_hit_beyond_the_maximum_range_did_not_come_back():
    """Expected 9.8 m, 0.5 m wide: P(z > 10) = 1 - Phi(0.4)."""
    assert_allclose(component_masses(METRES, [9.8], MIXTURE)[0, 0, -1], stats.norm.sf(0.4), atol=1e-9)


def test_where_nothing_is_within_reach_a_hit_is_nothing():
    """All of its mass lies in the last bin."""
    assert_allclose(component_masses(METRES, [np.inf], MIXTURE)[0, 0], np.eye(12)[-1])


def test_hits_widen_with_range():
    """0.1 m at zero growing by 50 % a metre: 0.3 m at 4 m."""
    mixture = RangeMixture(hit_spread_m=0.1, hit_growth_per_m=0.5)
    assert_allclose(component_cdfs(4.3, 4.0, mixture, MAX_M)[0], stats.norm.cdf(1), atol=ROUNDING)


WEIGHT = np.random.default_rng(0).uniform(0.1, 1, RangeScale(0.15, 0.06, 6.0).nodes + 1)


def ratio_table():
    scale = RangeScale(0.15, 0.06, 6.0)
    nodes_m = np.minimum(0.15 * np.expm1(0.06 * np.arange(scale.nodes)) / 0.06, 6.0)
    masses = bin_masses(scale, np.append(nodes_m, np.inf), RangeMixture())
    return log_ratio_table(scale, RangeMixture(), WEIGHT), WEIGHT / WEIGHT.sum() @ masses


def test_evidence_is_a_ratio_to_the_background():
    """Every expected range's reading distribution, ratio times background, sums to one."""
    table, background = ratio_table()
    # the table keeps 1e-9 in empty bins, of which there are fewer than a hundred
    assert_allclose(background @ np.exp(table[:, :-1]), 1, atol=1e-7)


def test_expected_posterior_is_the_prior():
    """sum over z of p(z) p(r | z) = p(r): readings alone do not move the belief on average."""
    table, background = ratio_table()
    prior = WEIGHT / WEIGHT.sum()
    posterior = prior * np.exp(table[:, :-1])
    posterior /= posterior.sum(axis=1, keepdims=True)
    assert_allclose(background @ posterior, prior, atol=1e-7)


def test_an_unsure_ray_has_no_evidence():
    """The last column of the table is exactly zero."""
    assert not ratio_table()[0][:, -1].any()


@pytest.mark.parametrize(
    "members", [{"hit_share": 0.9}, {"hit_share": -0.1, "short_share": 0.94}, {"hit_spread_m": 0.0}]
)
def test_impossible_parameters_are_refused(members):
    """Shares that do not sum to one or are negative; a spread of nothing."""
    with pytest.raises(ConfigError):
        RangeMixture(**members)

"""Low-rank factors: as good as their rank, and normalised."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from learnfilter.observe.colour import kernel
from learnfilter.observe.factors import factor_colour, factor_range
from learnfilter.observe.mixture import bin_masses, log_ratio_table
from tests.contracts.small import COARSE, colour_fit, mixture_fit

FIT = mixture_fit(COARSE)


def factored(rank):
    """[measured, expected] evidence of the factors."""
    factors = factor_range(COARSE, FIT, rank)
    return factors.measured @ factors.expected.T + factors.bias


def background():
    """[measured] how often each reading occurs, and the same for expected nodes."""
    expected = np.append(np.minimum(0.15 * np.expm1(0.06 * np.arange(COARSE.nodes)) / 0.06, 6.0), np.inf)
    weight = FIT.expected_weight / FIT.expected_weight.sum()
    return weight @ bin_masses(COARSE, expected, FIT.mixture), weight


def test_the_error_falls_with_rank():
    """Mean square error under the readings that occur (Eckart, Young 1936: each rank adds the best one)."""
    table = log_ratio_table(COARSE, FIT.mixture, FIT.expected_weight)
    weight_z, weight_r = background()
    errors = [
        weight_z @ (factored(rank) - table)[:, :-1] ** 2 @ weight_r
        for rank in (2, 4, 8, 12, 16, COARSE.nodes + 1)
    ]
    assert (np.diff(errors) < 0).all()
    assert errors[-1] < 1e-10


@pytest.mark.parametrize("rank", [1, 4, 12])
def test_the_bias_keeps_masses_normalised(rank):
    """Background times exp(evidence) sums to one for every expected node, however coarse the factors."""
    weight_z, _ = background()
    assert_allclose(weight_z @ np.exp(factored(rank)[:, :-1]), 1, atol=1e-9)


def test_an_unsure_ray_stays_without_evidence():
    """Features and bias of the last row are zero."""
    assert not factored(4)[:, -1].any()


def test_more_landmarks_err_less():
    """Kernel between background colours by features of 2 to 32 landmarks (Williams, Seeger 2001)."""
    fit = colour_fit()
    exact = kernel(fit.background, fit.background, fit.spread)
    finishes = fit.background[:4]
    errors = []
    for rank in (2, 8, 32):
        factors = factor_colour(fit, finishes, rank)
        features = kernel(fit.background, factors.landmarks, fit.spread) @ factors.root
        errors.append(np.square(features @ features.T - exact).mean())
    assert (np.diff(errors) < 0).all()


def test_finishes_among_the_landmarks_are_exact():
    """Between landmarks the factored kernel is the kernel itself."""
    fit = colour_fit()
    finishes = np.log(np.array([(0.8, 0.8, 0.8), (0.5, 0.05, 0.05), (0.05, 0.1, 0.6)]))
    factors = factor_colour(fit, finishes, 8)
    features = kernel(finishes, factors.landmarks, fit.spread) @ factors.root
    assert_allclose(features @ features.T, kernel(finishes, finishes, fit.spread), atol=1e-6)

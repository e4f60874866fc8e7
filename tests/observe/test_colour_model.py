"""The colour model: normalised, silent where it must be, and found again from samples."""

import numpy as np
import torch
from numpy.testing import assert_allclose

from learnfilter.core.strip import Strip, lay_on_ring
from learnfilter.observe.colour import (
    DARK,
    ColourFit,
    ColourModel,
    fit_colour,
    kernel,
    levelled,
    log_colour,
)
from learnfilter.observe.contract import Strips
from learnfilter.observe.fitting import Pairs
from tests.contracts.small import altered, render, small_plan

ONE_COLUMN = lay_on_ring(Strip((0.0,), 0.1, 6.0), 16, 2)
BACKGROUND = log_colour(np.random.default_rng(0).uniform(0, 1, (400, 3)))


def one_column_scores(fit, rgb, finish):
    """[b] evidence of single readings [b 3] for one finish, at one pose."""
    site = render(small_plan(), ONE_COLUMN, cell_m=1.0)
    site = altered(site, finish=np.full_like(site.finish, finish))
    rgb = torch.tensor(np.asarray(rgb)[:, None], dtype=torch.float32)
    strips = Strips(torch.full(rgb.shape[:2], torch.nan), rgb, torch.tensor([True]))
    return ColourModel(ONE_COLUMN, fit)(strips, site)[:, 0, 0].double().numpy()


def test_the_tilted_background_is_a_distribution():
    """Under the background itself the likelihood ratio averages to one, for every finish."""
    fit = ColourFit(0.5, 3.0, 0.0, 0.0, BACKGROUND)
    for finish in (0, 1):
        ratio = np.exp(one_column_scores(fit, np.exp(BACKGROUND) - DARK, finish))
        assert_allclose(ratio.mean(), 1, atol=1e-5)  # float32 evidence of up to three nats


def test_an_unknown_finish_scores_exactly_zero():
    """Whatever was measured."""
    fit = ColourFit(0.5, 3.0, 0.0, 0.0, BACKGROUND)
    assert not one_column_scores(fit, np.exp(BACKGROUND) - DARK, -1).any()


def test_evidence_is_bounded():
    """No colour earns more than the weight, so one thing the plan lacks cannot outvote a strip; with a
    normaliser between 1 and e^weight it costs no more either."""
    fit = ColourFit(0.5, 3.0, 0.0, 0.0, BACKGROUND)
    scores = one_column_scores(fit, np.random.default_rng(1).uniform(0, 50, (200, 3)), 1)
    assert np.abs(scores).max() <= 3.0


def test_the_kernel_is_a_gaussian_of_the_distance():
    """Distance 5 at spread 5 gives e^(-1/2); NaN gives nothing."""
    x = np.array([[3.0, 4.0, 0.0], [np.nan, 0.0, 0.0]])
    assert_allclose(kernel(x, np.zeros((1, 3)), 5.0), [[np.exp(-0.5)], [0.0]])


def test_a_strips_own_brightness_is_taken_out():
    """Twice the light adds log 2 to every channel; taken out whole, nothing is left of it."""
    x = np.random.default_rng(2).normal(size=(1, 6, 3))
    x[0, 2] = np.nan
    assert_allclose(levelled(x + np.log(2), 1.0, 0.0), levelled(x, 1.0, 0.0))
    assert_allclose(levelled(x + np.log(2), 0.5, 0.0), levelled(x, 0.5, 0.0) + np.log(2) / 2)


def colour_pairs(gain_sd, seed=0, strips=150, columns=20):
    """Strips under a light of their own that see four finishes, of which the plan knows three."""
    rng = np.random.default_rng(seed)
    finishes = np.array([(0.7, 0.7, 0.7), (0.5, 0.1, 0.1), (0.1, 0.2, 0.5), (0.3, 0.4, 0.1)])
    which = rng.integers(0, 4, (strips, columns))
    gain = np.exp(gain_sd * rng.normal(size=(strips, 1, 1)))
    rgb = finishes[which] * gain * np.exp(0.1 * rng.normal(size=(strips, columns, 3)))
    expected = np.where(which[..., None] < 3, finishes[which], np.nan)
    number = np.broadcast_to(np.arange(strips)[:, None], which.shape)
    size = which.size
    return Pairs(np.ones(size), np.ones(size), rgb.reshape(-1, 3), expected.reshape(-1, 3), number.ravel())


def test_agreement_earns_weight_and_chance_earns_none():
    """Colours that follow the finishes get a weight; the same colours shuffled among them almost none."""
    pairs = colour_pairs(0.0)
    shuffled = pairs._replace(rgb=np.random.default_rng(1).permutation(pairs.rgb))
    fit, nothing = (fit_colour(p, np.random.default_rng(2)) for p in (pairs, shuffled))
    assert fit.weight > 1.5
    assert nothing.weight < 0.2


def test_changing_light_is_taken_out():
    """Where strips differ in brightness by a factor of two, the whole of it is removed."""
    assert fit_colour(colour_pairs(0.7), np.random.default_rng(0)).level_power == 1.0


def test_without_colour_there_is_nothing_to_fit():
    """Strips without colour, or plans without finishes."""
    pairs = colour_pairs(0.0)
    nothing = np.full_like(pairs.rgb, np.nan)
    for lacking in (pairs._replace(rgb=nothing), pairs._replace(finish_rgb=nothing)):
        assert fit_colour(lacking, np.random.default_rng(0)) is None

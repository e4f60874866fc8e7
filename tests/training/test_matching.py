"""The matching stage's loss: what it is without information, and with all poses as candidates."""

import numpy as np
import pytest
import torch
from numpy.testing import assert_allclose, assert_array_equal
from torch.testing import assert_close

from learnfilter.observe.matcher import Matcher, MatcherShape
from learnfilter.training.matching import log_weights, matching_loss, neighbours
from tests.contracts.small import HEADINGS, LAYOUT, birth, score, small_site, trained
from tests.training.drives import stills_on_small_site

SITE = small_site()
POSES = HEADINGS * SITE.n_cells


def ignorant():
    """A matcher whose factors and biases are all zero."""
    start = birth()
    nothing = start.range_factors._replace(
        measured=0 * start.range_factors.measured,
        expected=0 * start.range_factors.expected,
        bias=0 * start.range_factors.bias,
    )
    start = start._replace(range_factors=nothing, colour_factors=None)
    return Matcher(LAYOUT, start, MatcherShape(residual=False), torch.Generator())


@pytest.mark.parametrize("decoys", [0, 20, 1000])
def test_without_information_the_loss_is_the_logarithm_of_the_number_of_poses(decoys):
    """However few candidates stand for them: cross-entropy of zero logits is ln n."""
    loss = matching_loss(ignorant(), SITE, stills_on_small_site(12), np.random.default_rng(0), 12, decoys)
    assert_allclose(float(loss.detach()), np.log(POSES), rtol=1e-6)  # float32


def test_with_all_cells_as_candidates_the_loss_is_the_filters():
    """Negative log-probability of the true pose after one strip from an even prior."""
    model, (seen, truth) = trained(), stills_on_small_site(12)
    scores = score(model, seen, SITE)
    log_belief = scores.flatten(1).log_softmax(1).view_as(scores)
    expected = -log_belief[torch.arange(12), truth.cell, truth.heading].mean()
    loss = matching_loss(model, SITE, (seen, truth), np.random.default_rng(0), 12, SITE.n_cells)
    assert_close(loss.detach(), expected, rtol=1e-5, atol=1e-5)  # float32


def test_few_candidates_estimate_the_loss_over_all():
    """The mean over 12 draws of 30 decoys of 144 cells, for evidence as flat as a tempered model's, stays
    within a tenth of a nat of the loss over all cells (its logarithm biases it a little downwards)."""
    shown = stills_on_small_site(12)
    start = birth()._replace(range_exponent=0.05, colour_exponent=0.05)
    model = Matcher(LAYOUT, start, MatcherShape(residual=False), torch.Generator())
    with torch.no_grad():
        whole = matching_loss(model, SITE, shown, np.random.default_rng(0), 12, SITE.n_cells)
        draws = [matching_loss(model, SITE, shown, np.random.default_rng(i), 12, 30) for i in range(12)]
    assert abs(float(torch.stack(draws).mean() - whole)) < 0.1


def test_the_same_stream_gives_the_same_loss():
    """All draws come from the generator that is handed in."""
    losses = [
        float(
            matching_loss(trained(), SITE, stills_on_small_site(12), np.random.default_rng(3), 5, 9).detach()
        )
        for _ in "ab"
    ]
    assert losses[0] == losses[1]


def test_every_weight_gets_a_gradient():
    """Of a matcher that has left its silent start."""
    model = trained()
    matching_loss(model, SITE, stills_on_small_site(12), np.random.default_rng(0), 12, 30).backward()
    assert all(p.grad is not None and p.grad.abs().max() > 0 for p in model.parameters())


def test_neighbours_are_the_live_cells_of_the_block():
    """Found again by distance: at most one row and one column away."""
    cells = np.array([0, SITE.n_cells // 2, SITE.n_cells - 1])
    for cell, block in zip(cells, neighbours(SITE, cells), strict=True):
        near = np.abs(SITE.cells - SITE.cells[cell]).max(axis=1) <= 1
        assert_array_equal(np.sort(block[block >= 0]), np.flatnonzero(near))


def test_weights_add_up_to_all_cells():
    """Near cells count once, sampled far ones for all that were not drawn."""
    around = neighbours(SITE, np.array([4, 50]))
    cells = np.unique(np.concatenate([around[around >= 0], [20, 90, 100]]))
    weights = np.exp(log_weights(cells, around, SITE.n_cells))
    assert_allclose(weights.sum(axis=1), SITE.n_cells)
    assert (weights[0][np.isin(cells, around[0])] == 1).all()

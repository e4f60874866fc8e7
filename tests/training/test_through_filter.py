"""The filter stage's loss and the stretches it is fed with."""

import numpy as np
import pytest
import torch
from numpy.testing import assert_allclose, assert_array_equal
from torch.testing import assert_close

from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import trace
from learnfilter.training.samples import stretch
from learnfilter.training.through_filter import filter_loss, step_losses
from tests.contracts.small import HEADINGS, blend, small_site, trained
from tests.training.drives import drive_on_small_site

SITE = small_site()
FLOOR = 1e-3


def losses_of(model, courses, length):
    odometry, seen, cell, heading = stretch(courses, length, np.random.default_rng(0))
    return step_losses(model, MotionModel(), SITE, odometry, seen, cell, heading, FLOOR)


@pytest.mark.parametrize("make", [blend, trained])
def test_losses_are_what_the_filter_says_of_the_truth(make):
    """Drive by drive, strip by strip, the trace's log-probabilities."""
    model, courses = make(), (drive_on_small_site(4, 0), drive_on_small_site(4, 1))
    losses = losses_of(model, courses, 4).detach().numpy()
    for column, driven in enumerate(courses):
        result = trace(model, MotionModel(), SITE, driven, FLOOR)
        assert_allclose(losses[:, column], -result.log_truth, rtol=1e-4, atol=1e-4)  # float32


def test_without_information_the_first_loss_is_the_logarithm_of_the_number_of_poses():
    """Exponents of nearly zero leave the start as it is: ln(cells x headings)."""
    model = blend()
    with torch.no_grad():
        for exponent in model.log_exponent.values():
            exponent.fill_(-30.0)
    assert_allclose(
        float(losses_of(model, (drive_on_small_site(4),), 4)[0].detach()),
        np.log(SITE.n_cells * HEADINGS),
        rtol=1e-5,
    )


def test_exponents_and_spreads_get_gradients():
    """What the filter stage tunes of an analytic model."""
    model, motion = blend(), MotionModel()
    odometry, seen, cell, heading = stretch((drive_on_small_site(4),), 4, np.random.default_rng(0))
    step_losses(model, motion, SITE, odometry, seen, cell, heading, FLOOR).sum().backward()
    assert all(float(p.grad.abs()) > 0 for p in model.parameters())
    assert float(motion.log_spread.grad.abs().max()) > 0


@pytest.mark.parametrize(("every_step", "expected"), [(0.0, 3.5), (1.0, 2.75)])
def test_the_loss_is_the_last_steps_and_a_share_of_all(every_step, expected):
    """Steps of mean 1, 1.5 and 3.5 nats: the last alone, or averaged with their mean 2."""
    losses = torch.tensor([[0.0, 2.0], [1.0, 2.0], [3.0, 4.0]])
    assert_close(float(filter_loss(losses, every_step)), expected)


def test_a_stretch_is_a_piece_of_the_drive():
    """Odometry, strips and truth of the same rows, wherever it begins."""
    whole = drive_on_small_site(9)
    rng = np.random.default_rng(0)
    for _ in range(5):
        odometry, seen, cell, heading = stretch((whole,), 4, rng)
        begin = int(np.flatnonzero(whole.truth.cell.numpy() == int(cell[0, 0]))[0])
        piece = slice(begin, begin + 4)
        assert_array_equal(cell[:, 0], whole.truth.cell[piece])
        assert_array_equal(heading[:, 0], whole.truth.heading[piece])
        assert_array_equal(odometry[:, 0], whole.steps.odometry[piece])
        assert_array_equal(seen.depth_m, whole.steps.strips.depth_m[piece])


def test_stretches_are_step_major_and_as_long_as_the_shortest_drive():
    """Two drives of 3 and 9 strips, 8 asked for: 3 steps, the drives' strips in turn."""
    short, long = drive_on_small_site(3, 0), drive_on_small_site(9, 1)
    odometry, seen, _, _ = stretch((short, long), 8, np.random.default_rng(0))
    assert odometry.shape == (3, 2, 3)
    assert_array_equal(seen.depth_m.reshape(3, 2, -1)[:, 0], short.steps.strips.depth_m)

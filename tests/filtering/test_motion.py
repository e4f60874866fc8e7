"""Carrying a belief: mass, mean, variance, walls, gradients.

The kernel is a Gaussian seen through linear interpolation.  Interpolating a shift whose fraction is f adds
f (1 - f) cells^2 of its own; noise is credited with it.
"""

import numpy as np
import pytest
import torch
from filterpy import discrete_bayes
from numpy.testing import assert_allclose
from torch.autograd import gradcheck
from torch.testing import assert_close

from learnfilter.filtering.motion import MotionSettings, predict, shift_weights
from tests.filtering.halls import NO_NOISE, at, drawn, lattice, motion, odometry

MEANS, VARIANCES = np.linspace(-2, 3, 51), np.append(0, np.geomspace(1e-3, 3, 30))
OFFSETS = torch.arange(-14.0, 15.0, dtype=torch.float64)
# How far the kernel's variance may exceed what it is asked for, cells^2: noise gives way to interpolation
# softly, worst (0.13) where a whole-cell shift meets a noise of 0.4 cells.
SOFT_EXCESS = 0.14
# A whole-cell shift without noise: share that stays in its cell along one axis, for the same reason.
SHARP = 0.98


def moments():
    """Means and variances asked for, and those of the kernel's weights."""
    mean, variance = map(torch.from_numpy, np.broadcast_arrays(*np.meshgrid(MEANS, VARIANCES)))
    weights = shift_weights(mean, variance, OFFSETS)
    got = (weights * OFFSETS).sum(-1)
    spread = (weights * (OFFSETS - got.unsqueeze(-1)).square()).sum(-1)
    return mean.numpy(), variance.numpy(), weights.sum(-1).numpy(), got.numpy(), spread.numpy()


def test_kernels_keep_mass_and_mean():
    """Whatever the noise: exact but for rounding."""
    mean, _, mass, got, _ = moments()
    assert_allclose(mass, 1, atol=1e-12)
    assert_allclose(got, mean, atol=1e-10)


def test_kernels_spread_by_the_noise_or_by_what_interpolation_adds():
    """At least the larger of the two (0.01 cells^2 short at most), and not much more."""
    mean, variance, _, _, spread = moments()
    excess = spread - np.maximum(variance, mean % 1 * (1 - mean % 1))
    assert excess.min() > -0.01
    assert excess.max() < SOFT_EXCESS


def test_noise_wider_than_interpolation_is_exact():
    """From 0.35 cells^2 on, interpolation is taken off to within 0.002."""
    _, variance, _, _, spread = moments()
    wide = variance > 0.35
    assert_allclose(spread[wide], variance[wide], atol=0.002)


@pytest.mark.parametrize("fraction", [0.1, 0.37, 0.5])
def test_repeated_sub_cell_shifts_smear_by_a_known_amount(fraction):
    """n noiseless shifts by a fraction f of a cell have variance n f (1 - f), n / 4 at most: linear
    interpolation's own.  Travel is along heading 0, where the lattice is open."""
    hall, steps = lattice(256, 3, 40), 12
    belief = at(hall, 0, 1, 6)
    for _ in range(steps):
        belief, _ = predict(belief, odometry(fraction * 0.25), hall, motion())
    along = belief.detach().sum((0, 1, 2)).numpy()
    mean = along @ np.arange(40)
    # the heading leaks into neighbouring bins at each step, 1.4 degrees apart: cosines of a few degrees
    assert_allclose(mean, 6 + steps * fraction, rtol=1e-3)
    assert_allclose(along @ (np.arange(40) - mean) ** 2, steps * fraction * (1 - fraction), rtol=0.02)


@pytest.mark.parametrize("settings", [NO_NOISE, MotionSettings()])
@pytest.mark.parametrize("move", [(0.1, 0.0, 0.3), (0.25, -0.1, 0.0), (0.0, 0.0, -2.0), (-0.3, 0.2, 4.0)])
def test_mass_is_kept_off_walls(settings, move):
    """The belief sums to one, and in the middle of a hall nothing is lost."""
    hall = lattice(8, 21, 21)
    belief, lost = predict(at(hall, 3, 10, 10), odometry(*move), hall, motion(settings))
    assert_allclose(float(belief.detach().sum()), 1, atol=1e-12)
    assert_allclose(float(lost.detach()), 0, atol=1e-12)


@pytest.mark.parametrize(("heading", "row", "column"), [(0, 10, 12), (2, 12, 10), (4, 10, 8), (6, 8, 10)])
def test_whole_cell_moves_carry_the_belief_along(heading, row, column):
    """Two cells forward: what was in a cell is two cells ahead, sharp but for softness on both axes and a
    turn of nothing."""
    hall = lattice(8, 21, 21)
    start = at(hall, heading, 10, 10)
    # 8 headings stand for 45 degrees each; a belief that may face anywhere in them spreads sideways
    belief, _ = predict(start, odometry(0.5), hall, motion())
    planes = belief.detach()[0, heading].numpy()
    assert np.unravel_index(planes.argmax(), planes.shape) == (row, column)
    assert_allclose(planes.sum(0) @ np.arange(21) / planes.sum(), column, atol=1e-9)
    assert_allclose(planes.sum(1) @ np.arange(21) / planes.sum(), row, atol=1e-9)


@pytest.mark.parametrize(("heading", "row", "column"), [(0, 12, 10), (2, 10, 8), (4, 8, 10), (6, 10, 12)])
def test_a_move_across_is_a_move_to_the_left(heading, row, column):
    """Facing right, left is up; facing up, it is -x; and so round."""
    hall = lattice(8, 21, 21)
    belief, _ = predict(at(hall, heading, 10, 10), odometry(0.0, 0.5), hall, motion())
    planes = belief.detach()[0, heading].numpy()
    assert np.unravel_index(planes.argmax(), planes.shape) == (row, column)


def test_four_quarter_turns_lead_back():
    """Every pose ends where it began, but for the softness of four whole-bin turns."""
    hall = lattice(16, 3, 3)
    belief = start = drawn(hall)
    for _ in range(4):
        belief, _ = predict(belief, odometry(0, 0, np.pi / 2), hall, motion())
    variation = 0.5 * float((belief - start).abs().sum().detach())
    assert variation < 1 - SHARP**12  # twelve sharp kernels: two axes and the turn, four times


def test_a_quarter_turn_turns_left():
    """From heading 0 to heading 90 degrees."""
    hall = lattice(8, 1, 1)
    belief, _ = predict(at(hall, 0, 0, 0), odometry(0, 0, np.pi / 2), hall, motion())
    assert float(belief.detach()[0, 2, 0, 0]) > SHARP


def test_the_shift_happens_under_the_old_heading():
    """Forward two cells and a quarter turn, from heading 0: to the right, then facing up."""
    hall = lattice(8, 15, 15)
    belief, _ = predict(at(hall, 0, 7, 7), odometry(0.5, 0, np.pi / 2), hall, motion())
    assert np.unravel_index(belief.detach()[0].numpy().argmax(), (8, 15, 15)) == (2, 7, 9)


def test_prediction_along_a_corridor_is_filterpys():
    """A move's response to a delta, handed to filterpy as a kernel, predicts any belief alike."""
    hall, move = lattice(4, 1, 61), odometry(0.35)
    response, _ = predict(at(hall, 0, 0, 30), move, hall, motion(MotionSettings()))
    kernel = response.detach()[0].sum((0, 1)).numpy()[20:41]
    belief = np.zeros(61)
    belief[15:45] = np.random.default_rng(0).dirichlet(np.ones(30))
    start = torch.zeros(1, 4, 1, 61, dtype=torch.float64)
    start[0, 0, 0] = torch.from_numpy(belief)
    moved, _ = predict(start, move, hall, motion(MotionSettings()))
    expected = discrete_bayes.predict(belief, 0, kernel, mode="constant")
    assert_allclose(moved.detach()[0].sum((0, 1)).numpy(), expected, atol=1e-9)


def test_odometry_noise_has_the_spread_asked_for():
    """0.2 m a metre over 2.5 m forward is 0.5 m = 2 cells along; across, a heading anywhere in its bin of
    5.6 degrees adds 2.5 m x step^2 / 12: variances of SciPy's uniform and normal add."""
    hall = lattice(64, 61, 61)
    settings = MotionSettings(1e-6, 1e-6, 0.2, 1e-6)
    belief, _ = predict(at(hall, 0, 30, 25), odometry(2.5), hall, motion(settings))
    planes = belief.detach()[0].sum(0).numpy()
    offsets = (np.arange(61) - 35, np.arange(61) - 30)
    along, across = planes.sum(0) @ offsets[0] ** 2, planes.sum(1) @ offsets[1] ** 2
    sideways = (2.5 / 0.25) ** 2 * (2 * np.pi / 64) ** 2 / 12
    # the kernel is cut at four standard deviations and its variance is good to 0.002 cells^2
    assert_allclose([along, across], [4, 4 + sideways], rtol=0.002)


def test_turn_noise_has_the_spread_asked_for():
    """0.1 radians a radian over 2 radians, and 0.05 radians a metre over 1 m: root of the sum of squares."""
    hall = lattice(64, 41, 41)
    settings = MotionSettings(0.1, 0.05, 1e-6, 1e-6)
    belief, _ = predict(at(hall, 0, 20, 20), odometry(1.0, 0, 2.0), hall, motion(settings))
    turned = belief.detach()[0].sum((1, 2)).numpy()
    error = (np.arange(64) * 2 * np.pi / 64 - 2.0 + np.pi) % (2 * np.pi) - np.pi
    assert_allclose(turned @ error, 0, atol=1e-6)
    assert_allclose(np.sqrt(turned @ error**2), np.hypot(0.2, 0.05), rtol=0.002)


@pytest.mark.parametrize("cells", [1, 1.5, 2, 2.7, 3, 4, 5.5, 7])
@pytest.mark.parametrize("angle_deg", [0, 22.5, 45])
def test_long_steps_do_not_tunnel(cells, angle_deg):
    """A wall one cell thick across the hall: nothing arrives behind it, straight or slanting.

    A hundredth may: softness widens kernels by a fraction of a cell, and a heading of 5.6 degrees blurs
    long steps.  (What noise puts beyond a wall is not checked cell by cell.)
    """
    walls = [(r, 10) for r in range(21)]
    hall = lattice(64, 21, 21, walls)
    start = torch.zeros(1, 64, 21, 21, dtype=torch.float64)
    start[0, round(angle_deg / 5.625), :, :10] = 1 / 210
    belief, _ = predict(start, odometry(cells * 0.25), hall, motion())
    assert float(belief.detach()[..., 11:].sum()) < 0.01


def test_mass_that_meets_a_wall_is_counted_as_lost():
    """A belief spread evenly over ten cells of a corridor, two cells forward: a fifth runs into its end."""
    hall = lattice(64, 1, 10)
    start = torch.zeros(1, 64, 1, 10, dtype=torch.float64)
    start[0, 0] = 0.1
    _, lost = predict(start, odometry(0.5), hall, motion())
    # besides, softness and a 2-degree half bin lose some over the corridor's sides
    assert 0.2 < float(lost.detach()) < 0.25


def test_when_all_is_lost_the_belief_starts_again():
    """Driven through the end of a corridor: every live pose alike."""
    hall = lattice(4, 1, 10, walls=[(0, 0)])
    belief, lost = predict(at(hall, 0, 0, 9), odometry(5.0), hall, motion())
    expected = (hall.live / (hall.live.sum() * 4)).expand_as(belief)
    assert_close(belief.detach(), expected.double(), rtol=1e-6, atol=0)
    assert float(lost.detach()) == pytest.approx(1)


def test_nothing_ends_off_the_live_cells():
    """A random belief, a random move, a post in the hall."""
    hall = lattice(8, 9, 9, walls=[(4, 4), (4, 5)])
    belief, _ = predict(drawn(hall), odometry(0.3, 0.1, 0.2), hall, motion(MotionSettings()))
    assert not belief.detach()[..., ~hall.live].any()


def test_gradients_reach_beliefs_and_spreads():
    """gradcheck in float64 of a move that turns, drifts and meets a post."""
    hall = lattice(4, 4, 5, walls=[(1, 2)])
    model = motion(MotionSettings(0.2, 0.1, 0.3, 0.05))
    spreads = model.log_spread.detach().clone().requires_grad_()
    del model.log_spread

    def moved(belief, log_spread):
        model.log_spread = log_spread
        return predict(belief, odometry(0.3, 0.1, 0.4), hall, model)

    assert gradcheck(moved, (drawn(hall).requires_grad_(), spreads), fast_mode=True)

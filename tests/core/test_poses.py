"""Planar poses and motions against hand-worked moves and complex numbers."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from learnfilter.core.poses import between, compose, inverse, through_mount, wrap

ROUNDING = 1e-9  # coordinates of up to 100 m and sines in float64
IN_ANY_TIME = settings(deadline=None)  # a busy machine is no failure
COORDINATE = st.floats(-100, 100)
POSE = st.tuples(COORDINATE, COORDINATE, st.floats(-np.pi, np.pi, exclude_max=True))


def assert_same_pose(actual, expected):
    """Positions alike, headings alike up to whole turns."""
    actual, expected = np.asarray(actual), np.asarray(expected)
    assert_allclose(actual[..., :2], expected[..., :2], atol=ROUNDING)
    assert_allclose(np.exp(1j * actual[..., 2]), np.exp(1j * expected[..., 2]), atol=ROUNDING)


@pytest.mark.parametrize(
    ("angle", "expected"),
    [(0, 0), (np.pi, -np.pi), (-np.pi, -np.pi), (3 * np.pi, -np.pi), (np.radians(359), np.radians(-1))],
)
def test_wrap_gives_the_half_open_circle(angle, expected):
    """-pi belongs to the range, pi does not."""
    assert_allclose(wrap(angle), expected, atol=1e-12)


def test_heading_error_across_the_cut_is_short():
    """From 179 to -179 degrees is 2 degrees, never 358 (circular statistics)."""
    assert_allclose(np.degrees(wrap(np.radians(-179) - np.radians(179))), 2, atol=1e-9)


# Thrun, Burgard, Fox 2005, section 5.4, rotate-translate-rotate: start, (turn, travel, turn), end
BOOK_MOVES = [
    ((0, 0, 0), (np.pi / 4, np.sqrt(2), np.pi / 4), (1, 1, np.pi / 2)),
    ((1, 2, np.pi / 2), (0, 1, 0), (1, 3, np.pi / 2)),
    ((0, 0, 0), (np.pi, 1, -np.pi), (-1, 0, 0)),
]


@pytest.mark.parametrize(("start", "moves", "end"), BOOK_MOVES)
def test_compose_follows_the_books_moves(start, moves, end):
    """Turn, travel straight, turn again: each is a motion of its own."""
    first, travel, second = moves
    pose = start
    for motion in ((0, 0, first), (travel, 0, 0), (0, 0, second)):
        pose = compose(pose, motion)
    assert_same_pose(pose, end)


@pytest.mark.parametrize(("start", "moves", "end"), BOOK_MOVES)
def test_between_has_the_books_travel_and_turn(start, moves, end):
    """Its length is the travel and its turn the sum of both turns."""
    forward, left, turn = between(start, end)
    assert_allclose(
        [np.hypot(forward, left), np.cos(turn)], [moves[1], np.cos(moves[0] + moves[2])], atol=1e-12
    )


def test_the_shift_happens_under_the_old_heading():
    """Facing up, one metre forward and a quarter turn: up, not left."""
    assert_same_pose(compose((0, 0, np.pi / 2), (1, 0, np.pi / 2)), (0, 1, np.pi))


@IN_ANY_TIME
@given(POSE, POSE)
def test_compose_is_multiplication_of_rigid_motions(pose, motion):
    """The same in complex numbers: z = z0 + e^(i heading) (forward + i left)."""
    turn = np.exp(1j * pose[2])
    z = complex(pose[0], pose[1]) + turn * complex(motion[0], motion[1])
    assert_same_pose(compose(pose, motion), (z.real, z.imag, pose[2] + motion[2]))


@IN_ANY_TIME
@given(POSE, POSE)
def test_between_undoes_compose(pose, motion):
    """The motion from a pose to where a motion leads is that motion."""
    assert_same_pose(between(pose, compose(pose, motion)), motion)


@IN_ANY_TIME
@given(POSE)
def test_inverse_leads_back(motion):
    """A motion and its inverse end where they began."""
    assert_same_pose(compose(motion, inverse(motion)), (0, 0, 0))


@IN_ANY_TIME
@given(st.floats(-np.pi, np.pi, exclude_max=True), st.floats(-3, 3))
def test_a_pure_turn_does_not_depend_on_the_heading(heading, turn):
    """No travel: whatever the heading, the motion is the turn alone."""
    assert_same_pose(between((1, 2, heading), (1, 2, heading + turn)), (0, 0, turn))


def test_a_sensor_ahead_of_the_axle_swings_sideways():
    """Turning in place by t moves a sensor 0.2 m ahead along an arc: (0.2 (cos t - 1), 0.2 sin t, t) seen
    from where it was."""
    turn = 0.3
    expected = (0.2 * (np.cos(turn) - 1), 0.2 * np.sin(turn), turn)
    assert_allclose(through_mount((0, 0, turn), (0.2, 0, 0)), expected, atol=1e-12)


@IN_ANY_TIME
@given(POSE, POSE, POSE)
def test_the_mount_conjugates(pose, motion, mount):
    """Carrying the robot and then its sensor, or the sensor by its own motion, ends at one place."""
    carried = compose(compose(pose, motion), mount)
    assert_allclose(
        compose(compose(pose, mount), through_mount(motion, mount))[:2], carried[:2], atol=10 * ROUNDING
    )

"""What lets a motion through, against shapely."""

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from learnfilter.core.errors import ConfigError, ShapeError
from learnfilter.runtime.moves import MOTIONS, Footprint, Motion, check_motions, clear_motions, free_range

CAMERA = np.radians(np.linspace(-43.6, 43.6, 32))
SCANNER = np.radians(np.arange(-90.0, 91.0, 2.0))
AHEAD = Motion(0.5, 0.0, 0.0)


def clear(depth, bearings, motion=AHEAD, **footprint):
    return bool(clear_motions([motion], depth, bearings, Footprint(**footprint))[0])


@given(
    seed=st.integers(0, 10**6),
    forward=st.floats(-0.3, 0.6),
    left=st.floats(-0.4, 0.4),
    mount=st.tuples(st.floats(-0.1, 0.1), st.floats(-0.1, 0.1), st.floats(-1, 1)),
)
@settings(max_examples=200, deadline=None, derandomize=True)
def test_a_clear_motion_meets_nothing_that_the_strip_shows(seed, forward, left, mount):
    """The swept disc, built by shapely, stays off the line through all returns."""
    depth = np.random.default_rng(seed).uniform(0.3, 2.0) + np.random.default_rng(seed + 1).exponential(
        0.2, 91
    )
    motion = Motion(forward, left, 0.3)
    if clear(depth, SCANNER, motion, mount=mount):
        returns = np.stack([depth * np.cos(SCANNER + mount[2]), depth * np.sin(SCANNER + mount[2])], 1)
        swept = shapely.LineString([(0, 0), (forward, left)]).buffer(0.2)
        assert not swept.intersects(shapely.LineString(returns + mount[:2]))


@pytest.mark.parametrize(("wall_m", "expected"), [(0.74, False), (0.77, True)])
def test_room_ahead_is_measured_to_the_front_of_the_disc(wall_m, expected):
    """0.5 m of travel, 0.2 m of radius and 0.05 m of clearance need 0.75 m."""
    depth = wall_m / np.cos(SCANNER).clip(1e-3)
    assert clear(depth, SCANNER) is expected


@pytest.mark.parametrize("column", range(40, 51))
def test_a_missing_column_ahead_forbids(column):
    """Nothing came back is not the same as nothing there."""
    depth = np.full(91, 3.0)
    depth[column] = np.nan
    assert not clear(depth, SCANNER)


@pytest.mark.parametrize("motion", [Motion(-0.2, 0, 0), Motion(0, 0.2, 0), Motion(0.1, -0.3, 0)])
def test_what_the_sensor_cannot_see_forbids(motion):
    """A camera that looks ahead says nothing of the back and the sides."""
    assert not clear(np.full(32, 5.0), CAMERA, motion)


def test_a_camera_of_90_degrees_sees_enough_to_drive_ahead():
    """Its flanks, which it came past, are trusted as far as the skirt."""
    assert clear(np.full(32, 5.0), CAMERA)


def test_without_a_skirt_unseen_flanks_forbid():
    """The strict reading of 'seen free'."""
    assert not clear(np.full(32, 5.0), CAMERA, skirt_m=0.0)


def test_turning_on_the_spot_is_always_clear():
    """A disc that turns sweeps nothing new."""
    assert clear(np.full(32, np.nan), CAMERA, Motion(0.0, 0.0, 1.0))


def test_a_sensor_that_looks_back_lets_the_robot_back_up():
    """The mount's heading turns the field of view."""
    assert clear(np.full(91, 2.0), SCANNER, Motion(-0.3, 0, 0), mount=(0.0, 0.0, np.pi))


def test_between_columns_the_nearer_reading_counts():
    """Half-way between readings of 1 and 3 metres only 1 metre is known to be free."""
    free, seen = free_range(np.array([0.05, 0.0, 0.12, 0.2]), np.array([1.0, 3.0]), np.array([0.0, 0.1]))
    np.testing.assert_array_equal(free, [1.0, 1.0, 3.0, 0.0])
    np.testing.assert_array_equal(seen, [True, True, True, False])


def test_a_sensor_beside_the_robot_is_refused():
    """The rule about convex ground needs the sensor on the disc."""
    with pytest.raises(ConfigError, match="not on the robot"):
        Footprint(mount=(0.3, 0.0, 0.0))


def test_lengths_must_agree():
    """A depth for every bearing."""
    with pytest.raises(ShapeError):
        clear(np.ones(5), SCANNER)


def test_motions_are_judged_one_by_one():
    """A wall 0.6 m ahead stops half a metre and not a quarter; order and turns between do not matter."""
    depth = 0.6 / np.cos(SCANNER).clip(1e-3)
    motions = [Motion(0, 0, 1.0), Motion(0.5, 0, 0), Motion(0, 0, -1.0), Motion(0.25, 0, 0)]
    np.testing.assert_array_equal(
        clear_motions(motions, depth, SCANNER, Footprint()), [True, False, True, True]
    )


def test_an_infinite_reading_shows_nothing():
    """Some drivers say infinity where nothing came back."""
    assert not clear(np.full(91, np.inf), SCANNER)


def test_the_usual_motions_turn_as_much_to_the_left_as_to_the_right():
    """Else a robot that draws them evenly would circle."""
    np.testing.assert_allclose(sum(motion.turn_rad for motion in MOTIONS), 0.0, atol=1e-12)


@pytest.mark.parametrize("side", [1.0, -1.0])
def test_motions_without_a_way_to_turn_are_refused(side):
    """Blocked, it could do nothing, or turn one way only."""
    with pytest.raises(ConfigError, match=r"mover\.moves"):
        check_motions([Motion(0.5, 0, side), Motion(0, 0, side)])

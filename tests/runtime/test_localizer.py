"""The robot's side of a step: what it answers, what it refuses, what it never becomes."""

import numpy as np
import pytest

from learnfilter.core.errors import StepError
from learnfilter.core.estimate import Mode
from learnfilter.core.poses import compose, wrap
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.estimate import base_mode
from learnfilter.runtime.motion import MotionNoise
from tests.shipping import STRIP, rehearsed, rendered

STILL = np.zeros(3)


@pytest.fixture(scope="module")
def localizer(shipped) -> Localizer:
    return Localizer(load_bundle(shipped("beam+colour")))


@pytest.fixture
def awake(localizer) -> Localizer:
    """A localizer that has weighed its first strip."""
    localizer.reset()
    localizer.step(STILL, *strip(0), time_s=10.0)
    return localizer


def strip(row: int):
    """Depth and colour of a row of the drive."""
    drive = rehearsed()[1]
    return drive.depth_m[row], drive.rgb[row]


def drive_on(localizer: Localizer, rows: int):
    """Answers along the drive from its start."""
    localizer.reset()
    odometry = rehearsed()[1].odometry
    return [localizer.step(odometry[row], *strip(row)) for row in range(rows)]


def test_the_robot_finds_itself(localizer):
    """When it first locks, the base is within 0.5 m and 15 degrees of where the simulator had it."""
    answers = drive_on(localizer, 60)
    row = [answer.state for answer in answers].index("locked")
    gap = answers[row].pose - rehearsed()[1].reference[row]
    assert np.hypot(*gap[:2]) < 0.5 and abs(wrap(gap[2])) < np.radians(15)


@pytest.mark.parametrize("place", [0, 10, 40, 80])
def test_a_robot_carried_off_is_lost_and_finds_itself(localizer, place):
    """Locked on one drive, it wakes up on another: lost within 5 weighed strips, then locked where it is."""
    first, second = rendered()[1]
    localizer.reset()
    rows = zip(first.odometry, first.depth_m, first.rgb, strict=True)
    assert any(localizer.step(*row).state == "locked" for row in rows)
    states, gaps = [], []
    for row in range(place, len(second)):
        moved = second.odometry[row] * (row > place)
        answer = localizer.step(moved, second.depth_m[row], second.rgb[row])
        if answer.weighed:
            states.append(answer.state)
            gaps.append(answer.pose - second.reference[row])
    lost = states.index("lost")
    gap = gaps[states.index("locked", lost)]
    assert lost < 5
    assert np.hypot(*gap[:2]) < 0.5 and abs(wrap(gap[2])) < np.radians(15)


def test_a_new_start_knows_nothing(localizer):
    """Every live pose alike."""
    localizer.reset()
    site = rehearsed()[0]
    expected = np.broadcast_to(site.live / (site.n_cells * site.grid.headings), site.grid.shape)
    np.testing.assert_allclose(localizer.belief, expected, rtol=1e-6)  # float32


def test_a_reset_forgets(localizer):
    """The same drive again gives the same answers."""
    first, again = (drive_on(localizer, 12)[-1] for _ in range(2))
    np.testing.assert_array_equal(first.pose, again.pose)


def test_a_parked_robot_counts_a_strip_once(awake):
    """Six hundred surprises a minute are one surprise."""
    before = awake.belief.copy()
    answers = [awake.step(STILL, *strip(5)) for _ in range(5)]
    assert not any(answer.weighed for answer in answers)
    np.testing.assert_array_equal(awake.belief, before)


@pytest.mark.parametrize(
    ("odometry", "expected"),
    [
        ((0.41, 0, 0), True),
        ((0, -0.41, 0), True),
        ((0, 0, -0.41), True),
        ((0.3, 0.2, 0), False),
        ((0.2, 0, 0.3), False),
    ],
)
def test_enough_travel_or_turning_makes_a_strip_count(awake, odometry, expected):
    """Either alone, from 0.4 m or 0.4 rad as the bundle says; the two do not add up."""
    assert awake.step(odometry, *strip(1)).weighed == expected


def test_small_motions_add_up(awake):
    """Four steps of 0.11 m are more than 0.4 m."""
    weighed = [awake.step((0.11, 0, 0), *strip(1)).weighed for _ in range(4)]
    assert weighed == [False, False, False, True]


def test_between_weighed_strips_odometry_carries_the_pose(awake):
    """The base moves by what the wheels say, in the robot's own frame, however the sensor is mounted."""
    before = awake.step(STILL, *strip(0)).pose
    motion = np.array([0.2, 0.05, 0.1])
    np.testing.assert_allclose(awake.step(motion, *strip(1)).pose, compose(before, motion), atol=1e-9)


def test_the_base_stands_where_the_mount_says():
    """A sensor 1 m ahead of the base, looking left, at (3, 2) facing north: the base faces east at (2, 2)."""
    mode = Mode(np.array([3.0, 2.0, np.pi / 2]), 0.7, np.diag([0.0, 0.0, 0.01]))
    base = base_mode(mode, np.zeros(3), np.array([1.0, 0.0, np.pi / 2]), MotionNoise(0, 0, 0, 0))
    np.testing.assert_allclose(base.pose, [2.0, 2.0, 0.0], atol=1e-12)
    # a heading off by s swings the base, 1 m behind, by s sideways: with it y varies as much, against it
    expected = [[0, 0, 0], [0, 0.01, -0.01], [0, -0.01, 0.01]]
    np.testing.assert_allclose(base.covariance, expected, atol=1e-12)


def test_what_is_pending_widens_the_covariance():
    """Variances of the motion model: (0.1 x 2 m)^2 along each axis, (0.05 x 2 m)^2 of heading."""
    mode = Mode(np.zeros(3), 1.0, np.zeros((3, 3)))
    base = base_mode(mode, np.array([2.0, 0.0, 0.0]), np.zeros(3), MotionNoise(0.3, 0.05, 0.1, 0.3))
    np.testing.assert_allclose(np.diag(base.covariance), [0.04, 0.04, 0.01], atol=1e-12)


WIDTH = STRIP.columns
DEPTH, RGB = np.full(WIDTH, 2.0), np.full((WIDTH, 3), 0.5)


def spoiled(array, value):
    out = array.copy()
    out[5] = value
    return out


BAD = {
    "nan odometry": ((np.nan, 0, 0), DEPTH, RGB, 11.0, "odometry"),
    "infinite odometry": ((0, np.inf, 0), DEPTH, RGB, 11.0, "odometry"),
    "a leap": ((50.0, 0, 0), DEPTH, RGB, 11.0, "odometry"),
    "a spin": ((0, 0, 7.0), DEPTH, RGB, 11.0, "odometry"),
    "two odometry values": ((0, 0), DEPTH, RGB, 11.0, "odometry"),
    "a narrow strip": (STILL, DEPTH[1:], RGB, 11.0, "depth_m"),
    "no numbers": (STILL, ["a"] * WIDTH, RGB, 11.0, "depth_m"),
    "negative depth": (STILL, spoiled(DEPTH, -0.1), RGB, 11.0, r"depth_m\[5\]"),
    "infinite depth": (STILL, spoiled(DEPTH, np.inf), RGB, 11.0, r"depth_m\[5\]"),
    "narrow colour": (STILL, DEPTH, RGB[1:], 11.0, "rgb"),
    "colour above one": (STILL, DEPTH, spoiled(RGB, 1.5), 11.0, r"rgb\[5, 0\]"),
    "time going back": (STILL, DEPTH, RGB, 9.0, "time_s"),
    "two odometries at once": (np.zeros((2, 3)), DEPTH, RGB, 11.0, "odometry"),
    "words for odometry": ("ahead", DEPTH, RGB, 11.0, "odometry"),
    "no depth": (STILL, None, RGB, 11.0, "depth_m"),
    "minus infinite depth": (STILL, spoiled(DEPTH, -np.inf), RGB, 11.0, r"depth_m\[5\]"),
    "negative colour": (STILL, DEPTH, spoiled(RGB, -0.1), 11.0, r"rgb\[5, 0\]"),
    "infinite colour": (STILL, DEPTH, spoiled(RGB, np.inf), 11.0, r"rgb\[5, 0\]"),
    "time standing still": (STILL, DEPTH, RGB, 10.0, "time_s"),
    "infinite time": (STILL, DEPTH, RGB, np.inf, "time_s"),
    "no time": (STILL, DEPTH, RGB, np.nan, "time_s"),
}


@pytest.mark.parametrize("bad", BAD.values(), ids=BAD)
def test_a_bad_input_is_named_and_changes_nothing(awake, bad):
    """The next good strip is taken in as if the bad one had never come."""
    *given, place = bad
    good = (np.array([0.5, 0.0, 0.0]), *strip(2), 11.0)
    expected, belief = awake.step(*good), awake.belief
    awake.reset()
    awake.step(STILL, *strip(0), time_s=10.0)
    with pytest.raises(StepError, match=place):
        awake.step(*given)
    np.testing.assert_equal(awake.step(*good)._asdict(), expected._asdict())
    np.testing.assert_array_equal(awake.belief, belief)


AT_ANY_TIME = {name: bad for name, bad in BAD.items() if bad[-1] != "time_s"}


@pytest.mark.parametrize("bad", AT_ANY_TIME.values(), ids=AT_ANY_TIME)
def test_a_bad_first_input_is_no_start(localizer, bad):
    """The next good strip is the first."""
    *given, place = bad
    localizer.reset()
    before = localizer.belief
    with pytest.raises(StepError, match=place):
        localizer.step(*given)
    np.testing.assert_array_equal(localizer.belief, before)
    assert localizer.step(STILL, *strip(0), time_s=1.0).weighed


def test_returns_outside_the_sensors_ranges_did_not_come_back(awake):
    """Depth 0 and depth beyond the maximum weigh like NaN, as in a drive table that is read."""
    depth, rgb = strip(2)
    beliefs = []
    for value in (np.nan, 0.0, STRIP.max_range_m + 1):
        awake.reset()
        awake.step(STILL, spoiled(depth, value), rgb)
        beliefs.append(awake.belief.copy())
    np.testing.assert_array_equal(beliefs[0], beliefs[1])
    np.testing.assert_array_equal(beliefs[0], beliefs[2])


def test_writing_to_the_belief_changes_nothing(awake):
    """Whoever watches does not steer."""
    before = awake.belief
    awake.belief[:] = 1.0
    np.testing.assert_array_equal(awake.belief, before)

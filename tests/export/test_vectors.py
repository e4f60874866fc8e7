"""Inputs and expected outputs for whoever ports the filter."""

from dataclasses import replace

import numpy as np
import pytest

from learnfilter.core.errors import DriveError
from learnfilter.core.poses import compose
from learnfilter.export.vectors import make_vectors, with_gaps
from learnfilter.runtime.bundle import VECTORS
from tests.shipping import STRIP, filter_of, rehearsed, rendered


@pytest.fixture(scope="module")
def vectors(shipped):
    with np.load(shipped("beam+colour") / VECTORS, allow_pickle=False) as file:
        return dict(file)


def test_at_least_fifty_whole_steps(vectors):
    """Weighed ones, with unweighed ones between, and as many beliefs."""
    weighed = vectors["weighed"]
    assert weighed.sum() == len(vectors["top_belief"]) >= 50 and not weighed.all()


def test_inputs_are_in_the_sensors_raw_order(vectors):
    """What the drives' tables hold, wherever a reading is left."""
    jump = jump_of(vectors)
    first, second = (drive.depth_m for drive in rendered()[1])
    expected = np.vstack([first[:jump], second])[: len(vectors["depth_m"])]
    kept = np.isfinite(vectors["depth_m"])
    assert vectors["depth_m"].shape[1] == STRIP.columns
    np.testing.assert_array_equal(vectors["depth_m"][kept], expected[kept])


def jump_of(vectors) -> int:
    """The row to which the robot was carried: the only one but the first in which wheels stood still."""
    still = np.flatnonzero((vectors["odometry"] == 0).all(axis=1))
    assert still[0] == 0 and len(still) == 2
    return int(still[1])


def test_the_robot_is_carried_off_after_two_thirds(vectors):
    """Time goes on and the wheels saw nothing, but the strips are of another drive."""
    jump, weighed = jump_of(vectors), vectors["weighed"]
    assert weighed[:jump].sum() / weighed.sum() == pytest.approx(2 / 3, abs=0.02)  # whole steps, of 74
    assert (np.diff(vectors["time_s"]) > 0).all()
    first, second = (drive.reference for drive in rendered()[1])
    assert np.hypot(*(first[jump - 1] - second[0])[:2]) > 1.0


def test_the_filter_takes_to_the_new_place(vectors):
    """By its end it believes the second drive, so the vectors hold a recovery."""
    row = len(vectors["pose"]) - 1
    expected = rendered()[1][1].reference[row - jump_of(vectors)]
    assert np.hypot(*(vectors["pose"][row] - expected)[:2]) < 0.5


def test_the_state_is_lost_after_the_robot_was_carried_off(vectors):
    """Numbers of states as the docstring has them; strips there surprise as a hundredth do."""
    jump = jump_of(vectors)
    rows = np.flatnonzero(vectors["weighed"])
    after = rows[rows > jump][:5]
    assert (vectors["state"][after] == 2).any() and set(vectors["state"].tolist()) <= {0, 1, 2}
    assert (vectors["surprise"][after] < 0.05).any()


def test_without_a_watch_nothing_surprises():
    """The column is there, and NaN."""
    made = make_vectors(filter_of("beam"), rendered()[1])
    assert np.isnan(made["surprise"]).all() and len(made["surprise"]) == len(made["state"])


def test_one_weighed_strip_is_all_missing(vectors):
    """Depth and colour; its answer is expected too."""
    blank = np.isnan(vectors["depth_m"]).all(axis=1) & np.isnan(vectors["rgb"]).all(axis=(1, 2))
    assert vectors["weighed"][blank].all() and blank.sum() == 1


def test_some_strips_miss_some_columns():
    """A third of sixteen columns, in every fourth row."""
    drive = replace(rehearsed()[1], depth_m=np.ones((len(rehearsed()[1]), STRIP.columns), np.float32))
    missing = np.isnan(with_gaps(drive, 50).depth_m).sum(axis=1)
    assert missing[:6].tolist() == [0, 5, 0, 0, 0, 5] and missing[50] == STRIP.columns


def test_between_weighed_strips_the_expected_pose_follows_the_wheels(vectors):
    """A row that is not weighed continues the row before by its own odometry."""
    rows = np.flatnonzero(~vectors["weighed"])
    expected = compose(vectors["pose"][rows - 1], vectors["odometry"][rows])
    np.testing.assert_allclose(vectors["pose"][rows], expected, atol=1e-9)


def test_the_heaviest_poses_come_first_and_agree_with_the_whole(vectors):
    """Ranked by belief, from the same beliefs that are there whole."""
    for step, belief in zip(vectors["belief_step"], vectors["belief"], strict=True):
        expected = np.sort(belief.ravel())[::-1][: vectors["top_belief"].shape[1]]
        np.testing.assert_array_equal(vectors["top_belief"][step], expected)
        np.testing.assert_array_equal(belief.ravel()[vectors["top_pose"][step]], expected)


def test_one_whole_belief_is_there(vectors):
    """After evidence and motion, and it is all there is; a second would not fit the bundle's budget."""
    assert vectors["belief_step"].tolist() == [1]
    np.testing.assert_allclose(vectors["belief"].sum(axis=(1, 2, 3)), 1.0, rtol=1e-5)  # float32 sums


@pytest.mark.parametrize("rows", [1, 40])
def test_short_drives_are_refused(rows):
    """Fewer than fifty weighed strips prove too little."""
    with pytest.raises(DriveError, match="more than 50 weighed strips"):
        make_vectors(filter_of("beam"), [drive.part(0, rows) for drive in rendered()[1]])

"""Inputs and expected outputs for whoever ports the filter."""

from dataclasses import replace

import numpy as np
import pytest

from learnfilter.core.errors import DriveError
from learnfilter.core.poses import compose
from learnfilter.export.vectors import make_vectors, with_gaps
from learnfilter.runtime.bundle import VECTORS
from tests.shipping import STRIP, filter_of, rehearsed


@pytest.fixture(scope="module")
def vectors(shipped):
    with np.load(shipped("beam+colour") / VECTORS, allow_pickle=False) as file:
        return dict(file)


def test_at_least_fifty_whole_steps(vectors):
    """Weighed ones, with unweighed ones between, and as many beliefs."""
    weighed = vectors["weighed"]
    assert weighed.sum() == len(vectors["top_belief"]) >= 50 and not weighed.all()


def test_inputs_are_in_the_sensors_raw_order(vectors):
    """What the drive's table holds, wherever a reading is left."""
    expected = rehearsed()[1].depth_m[: len(vectors["depth_m"])]
    kept = np.isfinite(vectors["depth_m"])
    assert vectors["depth_m"].shape[1] == STRIP.columns
    np.testing.assert_array_equal(vectors["depth_m"][kept], expected[kept])


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


def test_a_short_drive_is_refused():
    """Fewer than fifty weighed strips prove too little."""
    drive = rehearsed()[1]
    short = replace(
        drive, time_s=drive.time_s[:40], odometry=drive.odometry[:40], depth_m=drive.depth_m[:40],
        rgb=drive.rgb[:40], reference=None,
    )  # fmt: skip
    with pytest.raises(DriveError, match="at least 50 weighed strips"):
        make_vectors(filter_of("beam"), short)

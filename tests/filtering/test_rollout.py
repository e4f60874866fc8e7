"""Which strips are weighed, under which motion, and how a drive is cut to a course."""

from dataclasses import replace

import numpy as np
import pytest
import torch
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.errors import DriveError
from learnfilter.core.poses import compose
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import course_of
from learnfilter.filtering.rollout import weighed_steps
from tests.contracts.small import CIRCLE, small_site

MOUNT = (0.2, 0.0, np.pi / 2)


def drive(odometry, mount=(0.0, 0.0, 0.0), rgb=None, step_deg=11.25):
    """Rows with the given motions; depths count rows and columns so that strips can be told apart."""
    strip = Strip(even_strip(-22.5 * np.sign(step_deg), step_deg, 5), has_colour=rgb is not None, mount=mount)
    rows = len(odometry)
    depth = np.arange(rows)[:, None] + np.arange(5) / 10
    return Drive(
        np.arange(rows, dtype=float), np.asarray(odometry, float), depth.astype(np.float32), rgb, None, strip
    )


def steps(drive, after_m=0.2, after_rad=0.3):
    return weighed_steps(drive, lay_on_ring(drive.strip, 16, 2), after_m, after_rad)


def test_a_parked_robot_counts_once():
    """600 rows in one place: one strip."""
    assert_array_equal(steps(drive(np.zeros((600, 3)))).rows, [0])


def test_strips_are_weighed_after_enough_travel():
    """0.08 m a row, due every 0.2 m: each third row."""
    assert_array_equal(steps(drive([(0, 0, 0)] + [(0.08, 0, 0)] * 7)).rows, [0, 3, 6])


def test_turning_either_way_counts():
    """0.1 radians to and fro is turning too, due every 0.3."""
    turns = [(0, 0, 0.11 * (-1) ** i) for i in range(6)]
    assert_array_equal(steps(drive([(0, 0, 0), *turns])).rows, [0, 3, 6])


def test_motion_between_weighed_strips_is_composed():
    """Along a curve: from the same start, big steps lead where small ones do."""
    small = [(0, 0, 0)] + [(0.05, 0.01, 0.03)] * 12
    taken = steps(drive(small))
    by_big = by_small = np.zeros(3)
    for motion in taken.odometry.numpy():
        by_big = compose(by_big, motion)
    for motion in small[: taken.rows[-1] + 1]:
        by_small = compose(by_small, motion)
    assert_allclose(by_big, by_small, atol=1e-6)  # float32


def test_the_filter_is_driven_by_the_sensors_motion():
    """A sensor 0.2 m ahead that looks left: when the robot turns on the spot by t, the sensor moves by
    0.2 (cos t - 1) ahead and 0.2 sin t to the left of the robot, which is forward and right of itself."""
    taken = steps(drive([(0, 0, 0), (0, 0, 0.4)], mount=MOUNT))
    expected = [0.2 * np.sin(0.4), -0.2 * (np.cos(0.4) - 1), 0.4]
    assert_allclose(taken.odometry[1].numpy(), expected, atol=1e-6)


def test_the_weighed_strips_are_the_rows_own():
    """Laid counter-clockwise, so a clockwise sensor's are turned round."""
    taken = steps(drive([(0, 0, 0), (0.3, 0, 0)], step_deg=-11.25))
    assert_allclose(taken.strips.depth_m[1].numpy(), [1.4, 1.3, 1.2, 1.1, 1.0], rtol=1e-6)


def test_colours_become_linear():
    """Code 0.5 is 0.21404114 of the light (IEC 61966-2-1)."""
    taken = steps(drive([(0, 0, 0)], rgb=np.full((1, 5, 3), 0.5, np.float32)))
    assert_allclose(taken.strips.rgb.numpy(), 0.21404114, rtol=1e-6)


def test_a_sensor_without_colour_sees_none():
    """All NaN."""
    assert torch.isnan(steps(drive([(0, 0, 0)])).strips.rgb).all()


def on_small_site(reference, mount=(0.0, 0.0, 0.0)):
    """A course of rows that are all weighed, at these robot poses on the small site."""
    rows = len(reference)
    strip = replace(CIRCLE, has_colour=False, mount=mount)
    depth = np.ones((rows, strip.columns), np.float32)
    reference = np.asarray(reference, float)
    made = Drive(np.arange(rows, dtype=float), np.zeros((rows, 3)), depth, None, reference, strip)
    return course_of(made, small_site(), 0.0, 0.0)


def test_truth_is_where_the_sensor_was():
    """The robot at (1.1, 1.1) facing up, the sensor 0.4 m ahead: the sensor at (1.1, 1.5), looking left."""
    site = small_site()
    truth = on_small_site([(1.1, 1.1, np.pi / 2)], mount=(0.4, 0.0, np.pi / 2)).truth
    assert_array_equal(site.cells[truth.cell[0]], np.stack(site.grid.cell_of(1.1, 1.5)))
    assert int(truth.heading[0]) == 8


def test_a_pose_off_the_live_cells_counts_as_the_nearest_one_and_is_counted():
    """20 cm beyond the left wall no cell is live; the first live column stands for it."""
    site = small_site()
    truth = on_small_site([(-0.2, 1.2, 0.0), (1.2, 1.2, 0.0)]).truth
    assert_array_equal(truth.own, [False, True])
    row, column = site.cells[truth.cell[0]]
    assert column == np.flatnonzero(site.live[row])[0]
    assert row == site.grid.cell_of(-0.2, 1.2)[0]


def test_a_missing_reference_pose_is_named():
    """By its row."""
    with pytest.raises(DriveError, match="row 1"):
        on_small_site([(1.2, 1.2, 0.0), (np.nan, 1.2, 0.0)])

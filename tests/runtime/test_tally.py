"""What a locked robot saw of the plan, patch by patch: a round room of two metres."""

from dataclasses import replace

import numpy as np
import pytest

from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.runtime.site import RobotSite
from learnfilter.runtime.tally import Counts, count

GRID = PoseGrid(4, 40, 40, 0.25, -5.0, -5.0)
LAYOUT = RingLayout(16, 4, 0.0, 0, tuple(range(16)))  # columns all around, the first ahead
INDEX = np.full((40, 40), -1, np.int32)
INDEX[20, 20] = 0
POSE = np.array([0.125, 0.125, 0.0])  # the centre of that cell
SITE = RobotSite(
    GRID,
    LAYOUT,
    np.array([[20, 20]]),
    np.full((1, 16), 2.0, np.float32),
    np.zeros((1, 16), bool),
    np.zeros((1, 16), np.int16),
    np.ones((1, 3), np.float32),
    None,
    1,
)
ROOM = np.full(16, 2.0)


def counted(*strips: np.ndarray, site: RobotSite = SITE, pose: np.ndarray = POSE) -> Counts:
    counts = Counts.none(GRID)
    for depth in strips:
        count(counts, site, INDEX, pose, depth)
    return counts


def with_columns(depth: float, *columns: int) -> np.ndarray:
    strip = ROOM.copy()
    strip[list(columns)] = depth
    return strip


def patch(reach: float, column: int) -> tuple[int, int]:
    """Row and column of the half-metre square in which a ray from the pose ends."""
    angle = 2 * np.pi * column / 16
    end = POSE[:2] + reach * np.array([np.cos(angle), np.sin(angle)])
    column_of, row_of = np.floor((end + 5) / 0.5).astype(int)
    return int(row_of), int(column_of)


def places(counts: np.ndarray) -> dict[tuple[int, int], int]:
    return {(int(r), int(c)): int(counts[r, c]) for r, c in np.argwhere(counts)}


def test_a_plan_that_is_true_is_met():
    """Every patch that a column ends in, once; nothing gone, nothing new."""
    counts = counted(ROOM)
    assert places(counts.met) == {patch(2, column): 1 for column in range(16)}
    assert not counts.gone.any() and not counts.new.any()


def test_a_shelf_that_is_not_there_is_gone():
    """The strip looks through it, 1 m on; elsewhere the plan is met."""
    counts = counted(with_columns(3.0, 0))
    assert places(counts.gone) == {patch(2, 0): 1} and not counts.new.any()
    assert places(counts.met) == {patch(2, column): 1 for column in range(1, 16)}


def test_a_box_that_is_not_in_the_plan_is_new():
    """Where it stands; of the wall behind it nothing is said."""
    counts = counted(with_columns(1.0, 4))
    assert places(counts.new) == {patch(1, 4): 1} and not counts.gone.any()
    assert patch(2, 4) not in places(counts.met)


@pytest.mark.parametrize("depth", [2.25, 1.75])
def test_what_a_pose_half_a_cell_off_explains_is_met(depth):
    """A quarter of a metre at 2 m: tolerances of 0.2 m and 5 %."""
    assert places(counted(with_columns(depth, 0)).met)[patch(2, 0)] == 1


def test_a_column_without_return_says_nothing():
    """Nothing came back: a dark surface or none."""
    counts = counted(with_columns(np.nan, 0))
    assert patch(2, 0) not in places(counts.met) and not counts.gone.any() and not counts.new.any()


def test_where_the_plan_is_unsure_nothing_is_said():
    """An unknown door, and half a bearing to either side."""
    unsure = np.zeros((1, 16), bool)
    unsure[0, 8] = True
    counts = counted(with_columns(3.0, 7, 8, 9), site=replace(SITE, unsure=unsure))
    assert not counts.gone.any()


def test_strips_add_up():
    """Three that look through, one that does not."""
    counts = counted(*[with_columns(3.0, 0)] * 3, ROOM)
    assert (counts.gone[patch(2, 0)], counts.met[patch(2, 0)]) == (3, 1)


def test_a_turned_robot_counts_the_same_places():
    """A quarter turn left: what was ahead is now to the right, column 12."""
    turned = POSE + np.array([0, 0, np.pi / 2])
    counts = counted(with_columns(3.0, 12), pose=turned)
    assert places(counts.gone) == {patch(2, 0): 1}


@pytest.mark.parametrize("place", [(3.0, 3.0), (50.0, 0.0)])
def test_off_the_live_cells_nothing_is_counted(place):
    """There is no ring to hold the strip to."""
    assert not any(counts.any() for counts in counted(ROOM, pose=np.array([*place, 0.0])))

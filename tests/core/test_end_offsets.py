"""End points in sub-cells, worked out by hand."""

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from learnfilter.core.strip import end_offsets


@pytest.mark.parametrize(
    ("range_m", "degrees", "expected"),
    [
        (0.0, 0, (1, 1)),  # the centre of a cell of 2 x 2 sub-cells is a corner: up and right of it
        (0.3, 0, (1, 2)),  # 0.25 + 0.3 = 0.55 m from the left edge, sub-cells of 0.25 m
        (0.3, 180, (1, -1)),
        (0.6, 90, (3, 1)),
        (0.6, -90, (-2, 1)),
        (np.sqrt(2) * 0.3, 45, (2, 2)),
    ],
)
def test_end_points_are_counted_from_the_cells_lower_left_sub_cell(range_m, degrees, expected):
    """Cells of 0.5 m, two sub-cells a side; axis-aligned columns stay in one row or column."""
    assert end_offsets(range_m, np.radians(degrees), 0.5, 2) == expected


def test_opposite_headings_do_not_fall_apart_by_rounding():
    """cos(pi/2) is 6e-17 and cos(-pi/2) too: both columns run along one edge, on one side of it."""
    _, columns = end_offsets([1.0, 1.0], np.radians([90, -90]), 0.25, 2)
    assert_array_equal(columns, [1, 1])

"""The lattice of poses: centres, bins and their inverses."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.grid import PoseGrid

GRID = PoseGrid(headings=8, rows=3, columns=4, cell_m=0.5, left_m=-1.0, bottom_m=2.0)


def test_cell_centres_are_half_a_cell_from_the_corner():
    """(i + 1/2) cell from the lower left corner."""
    assert_allclose(GRID.x_centres(), [-0.75, -0.25, 0.25, 0.75])
    assert_allclose(GRID.y_centres(), [2.25, 2.75, 3.25])


def test_heading_bins_are_centred_at_whole_steps():
    """2 pi h / H, wrapped to [-pi, pi)."""
    assert_allclose(np.degrees(GRID.heading_centres()), [0, 45, 90, 135, -180, -135, -90, -45])


def test_every_centre_lies_in_its_own_cell():
    """cell_of undoes the centres."""
    y, x = np.meshgrid(GRID.y_centres(), GRID.x_centres(), indexing="ij")
    row, column = GRID.cell_of(x, y)
    assert_array_equal(row, np.indices(x.shape)[0])
    assert_array_equal(column, np.indices(x.shape)[1])


def test_points_beyond_the_lattice_keep_their_place():
    """Below and left of the corner indices go negative instead of wrapping."""
    assert_array_equal(GRID.cell_of(-1.01, 1.99), (-1, -1))


@pytest.mark.parametrize(
    ("degrees", "expected"), [(0, 0), (22, 0), (23, 1), (359, 0), (-44, 7), (180, 4), (-180, 4)]
)
def test_an_angle_goes_to_the_nearest_heading_bin(degrees, expected):
    """Bins reach half a step to both sides and wrap."""
    assert GRID.heading_of(np.radians(degrees)) == expected

"""Windows of a belief: what is in them, where they lie, and how they grow and shrink."""

import numpy as np
import pytest

from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.part import Part

GRID = PoseGrid(3, 7, 9, 0.25, -1.0, 2.0)
PLANES = np.random.default_rng(0).random((3, 2, 3)).astype(np.float32)


def whole(part: Part) -> np.ndarray:
    """The belief on the lattice, cell by cell."""
    belief = np.zeros(GRID.shape, np.float32)
    for h, r, c in np.ndindex(part.planes.shape):
        belief[h, part.row + r, part.column + c] = part.planes[h, r, c]
    return belief


@pytest.mark.parametrize(("row", "column"), [(0, 0), (2, 3), (5, 6)])
def test_a_window_is_where_its_corner_says(row, column):
    """Rows and columns of the lattice, from corner to corner of it."""
    expected = whole(Part(PLANES, row, column))
    found = np.zeros(GRID.shape, np.float32)
    found[(slice(None), *Part(PLANES, row, column).window)] = PLANES
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize(("row", "column"), [(0, 0), (2, 3), (5, 6)])
@pytest.mark.parametrize(
    ("more", "sizes"),
    [
        ((0, 0), {(0, 0): (2, 3), (2, 3): (2, 3), (5, 6): (2, 3)}),
        ((1, 2), {(0, 0): (3, 5), (2, 3): (4, 7), (5, 6): (3, 5)}),
        ((20, 20), {(0, 0): (7, 9), (2, 3): (7, 9), (5, 6): (7, 9)}),
    ],
)
def test_a_window_grows_up_to_the_edges(row, column, more, sizes):
    """The same belief, with that much room on each side where the lattice has it."""
    part = Part(PLANES, row, column)
    grown = part.grown(*more, GRID)
    assert grown.planes.shape[1:] == sizes[row, column]
    np.testing.assert_array_equal(whole(grown), whole(part))


def test_growing_leaves_the_old_window_alone():
    """What is written into the new one is not seen through the old."""
    part = Part(PLANES.copy(), 2, 3)
    part.grown(1, 1, GRID).planes[:] = 9
    np.testing.assert_array_equal(part.planes, PLANES)


def test_a_window_is_cropped_to_what_is_kept():
    """The smallest rectangle around two cells, at the place they had."""
    kept = np.zeros((5, 6), bool)
    kept[1, 4] = kept[3, 2] = True
    planes = np.random.default_rng(1).random((3, 5, 6)).astype(np.float32)
    cropped = Part(planes, 1, 2).cropped(kept)
    assert (cropped.row, cropped.column) == (2, 4)
    np.testing.assert_array_equal(cropped.planes, planes[:, 1:4, 2:5])


def test_a_windows_lattice_puts_its_cells_where_they_were():
    """Cell centres in the site's metres."""
    lattice = Part(PLANES, 2, 3).lattice(GRID)
    np.testing.assert_allclose(lattice.x_centres(), -1.0 + (3 + np.arange(3) + 0.5) * 0.25)
    np.testing.assert_allclose(lattice.y_centres(), 2.0 + (2 + np.arange(2) + 0.5) * 0.25)
    assert lattice.shape == (3, 2, 3)

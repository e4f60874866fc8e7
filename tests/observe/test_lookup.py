"""Sums along rings and at end points against plain loops."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.observe.lookup import smallest_integer, sum_along_rings, sum_at_end_points
from tests.oracles import ring_sums

FLOAT32_SUM = 1e-5  # a dozen float32 terms of order one


@pytest.mark.parametrize(("first", "columns"), [(0, 5), (-3, 5), (7, 12), (-40, 3)])
@pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
def test_sums_along_rings_wrap(first, columns, dtype):
    """Windows that start anywhere, a full circle included, in both integer widths."""
    rng = np.random.default_rng(0)
    table = rng.normal(size=(2, columns, 9)).astype(np.float32)
    ring = rng.integers(0, 9, (4, 12)).astype(dtype)
    expected = ring_sums(table, ring, first, 3, 4)
    assert_allclose(sum_along_rings(table, ring, first, 3, 4), expected, atol=FLOAT32_SUM)


def end_point_case(used):
    """Offsets that leave the field on all four sides, for three cells."""
    rng = np.random.default_rng(1)
    rows, columns = rng.integers(-9, 10, (2, 2, 3, 4))
    table = rng.normal(size=6).astype(np.float32)
    field = rng.integers(0, 6, (8, 10)).astype(np.uint8)
    return rows, columns, np.broadcast_to(used, (2, 4)).copy(), table, field, *rng.integers(0, 8, (2, 3))


def end_point_sums(end_row, end_column, used, table, field, cell_row, cell_column):
    """One end point at a time."""
    out = np.zeros((len(used), len(cell_row), end_row.shape[1]))
    for b, n, h, w in np.ndindex(*out.shape, used.shape[1]):
        row, column = cell_row[n] + end_row[b, h, w], cell_column[n] + end_column[b, h, w]
        inside = 0 <= row < field.shape[0] and 0 <= column < field.shape[1]
        out[b, n, h] += used[b, w] * (table[field[row, column]] if inside else table[-1])
    return out


@pytest.mark.parametrize("used", [[True] * 4, [True, False, False, True], [False] * 4])
def test_end_points_read_the_field(used):
    """On the field and off it; columns that are not used add nothing."""
    case = end_point_case(used)
    assert_allclose(sum_at_end_points(*case), end_point_sums(*case), atol=FLOAT32_SUM)


@pytest.mark.parametrize(("classes", "expected"), [(256, np.uint8), (257, np.uint16)])
def test_classes_take_the_narrowest_integer_that_holds_them(classes, expected):
    """256 classes are numbers 0 to 255."""
    ring = np.array([[0, classes - 1]])
    narrow = smallest_integer(ring, classes)
    assert narrow.dtype == expected
    assert_array_equal(narrow, ring)

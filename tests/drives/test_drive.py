"""A part of a drive is a drive of its own."""

import numpy as np
import pytest

from tests.drives.test_tables import STRIP, make_drive


def test_a_part_has_the_rows_between_its_ends():
    """Rows 1 and 2 of five, of every array; the sensor and the site go along."""
    whole = make_drive()
    part = whole.part(1, 3)
    assert len(part) == 2 and (part.strip, part.site) == (STRIP, "north hall")
    for name in ("time_s", "depth_m", "rgb", "reference"):
        np.testing.assert_array_equal(getattr(part, name), getattr(whole, name)[[1, 2]])


def test_a_part_begins_where_it_begins():
    """What was driven before its first row is no motion of its own; the next motion is."""
    whole = make_drive()
    np.testing.assert_array_equal(whole.part(1, 3).odometry, [[0.0, 0.0, 0.0], whole.odometry[2]])


def test_cutting_leaves_the_whole_as_it_was():
    """Though the part's first motion is zero."""
    whole = make_drive()
    whole.part(1, 3)
    np.testing.assert_array_equal(whole.odometry, make_drive().odometry)


@pytest.mark.parametrize("start", [0, 3])
def test_a_part_is_named_after_its_first_row(start):
    """So that two parts of one drive can be told apart."""
    assert make_drive().part(start, 5).name == f"night shift, from row {start}"


def test_what_the_whole_lacks_its_part_lacks():
    """No reference poses, no colour."""
    bare = make_drive(reference=False)
    assert bare.part(1, 3).reference is None and bare.part(1, 3).rgb is not None

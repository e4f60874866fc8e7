"""How strips lie on rings, against bearings worked out by hand."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import Strip, even_strip, lay_on_ring

STEP_DEG = 360 / 32  # 16 headings, 2 bearings each


def lay(first_deg, step_deg, columns, **members):
    return lay_on_ring(Strip(even_strip(first_deg, step_deg, columns), **members), 16, 2)


def test_a_strip_on_the_rings_own_step_meets_it_exactly():
    """Each position looks where its raw column looks."""
    layout = lay(-45, STEP_DEG, 9)
    assert_array_equal(layout.source, np.arange(9))
    assert_allclose(np.degrees(layout.strip_bearings()), -45 + STEP_DEG * np.arange(9), atol=1e-9)


def test_a_fractional_first_bearing_becomes_the_rings_phase():
    """-43.59375 degrees on a ring of 11.25 leaves a remainder of 1.40625."""
    layout = lay(-43.59375, STEP_DEG, 8)
    assert_allclose(np.degrees(layout.phase_rad), 1.40625, atol=1e-9)
    assert layout.first == -4


def test_clockwise_columns_are_read_backwards():
    """Position 0 is the rightmost bearing, which a clockwise strip measures last."""
    layout = lay(45, -STEP_DEG, 9)
    assert_array_equal(layout.source, np.arange(9)[::-1])
    assert_array_equal(layout.lay(np.arange(9.0)), np.arange(9.0)[::-1])


def test_heading_bins_roll_the_ring():
    """At heading h, position w looks along ring bearing h K + first + w: site angle heading + bearing."""
    layout = lay(-20, STEP_DEG, 5)
    heading, position = 3, 2
    ring = (heading * layout.bearings_per_heading + layout.first + position) % layout.bearings
    expected = heading * 2 * np.pi / 16 + layout.strip_bearings()[position]
    assert_allclose(np.exp(1j * layout.ring_angles()[ring]), np.exp(1j * expected), atol=1e-12)


def test_a_full_circle_covers_the_ring_once():
    """As many positions as bearings, every column once."""
    layout = lay(-180, STEP_DEG, 32)
    assert sorted(layout.source) == list(range(32))


def test_a_closed_circle_does_not_count_its_seam_twice():
    """Columns at -180 and at +180 degrees look the same way; the ring has room for one."""
    layout = lay(-180, STEP_DEG, 33)
    assert layout.columns == 32


def test_blind_columns_leave_gaps():
    """Gaps have no source, read as NaN and are not present."""
    layout = lay(-45, STEP_DEG, 9, blind=(3, 4))
    assert_array_equal(layout.source, [0, 1, 2, -1, -1, 5, 6, 7, 8])
    assert_array_equal(np.isnan(layout.lay(np.arange(9.0))), ~layout.present())


def test_a_ring_twice_as_fine_leaves_every_other_bearing_empty():
    """Each raw column is used once, none is stretched over two bearings."""
    layout = lay(-45, 2 * STEP_DEG, 5)
    assert_array_equal(layout.source, [0, -1, 1, -1, 2, -1, 3, -1, 4])


def test_a_coarser_ring_takes_the_nearest_column():
    """Of three columns a ring step, the middle one meets the bearing."""
    layout = lay(-STEP_DEG, STEP_DEG / 3, 7)
    assert_array_equal(layout.source, [0, 3, 6])


def test_pinhole_columns_land_by_bearing():
    """Bearings arctan of even pixels: every taken column is within half a step of its position, and no
    other column is nearer."""
    bearings = np.arctan(np.linspace(1, -1, 41))
    layout = lay_on_ring(Strip(tuple(bearings)), 16, 2)
    taken = np.asarray(layout.source)
    distance = np.abs(bearings[None, :] - layout.strip_bearings()[:, None])
    assert (taken >= 0).all()
    assert_array_equal(taken, distance.argmin(axis=1))
    assert distance.min(axis=1).max() <= np.radians(STEP_DEG) / 2


def test_colour_lies_along_its_own_axis():
    """The column axis of [t w 3] is laid, channels stay."""
    layout = lay(45, -STEP_DEG, 9)
    rgb = np.arange(27.0).reshape(1, 9, 3)
    assert_array_equal(layout.lay(rgb, axis=1), rgb[:, ::-1])


@pytest.mark.parametrize(
    ("step", "source"),
    [
        (1, [0, 1, 2, -1, -1, 5, 6, 7, 8]),
        (2, [0, -1, 2, -1, -1, -1, 6, -1, 8]),
        (3, [0, -1, -1, -1, -1, 5, -1, -1, 8]),
    ],
)
def test_every_nth_column_is_counted_over_the_gaps(step, source):
    """Served are 0 1 2 5 6 7 8: every second of them is 0 2 6 8, every third 0 5 8; the rest falls silent."""
    layout = lay(-45, STEP_DEG, 9, blind=(3, 4))
    assert_array_equal(layout.every(step).source, source)


def test_columns_left_out_move_no_bearing():
    """The others look where they looked."""
    layout = lay(-43.59375, STEP_DEG, 8)
    assert_array_equal(layout.every(2).strip_bearings(), layout.strip_bearings())
    assert_array_equal(layout.every(2).look_angles(), layout.look_angles())


@pytest.mark.parametrize(
    ("bearings", "blind", "message"),
    [
        ((0.0, 0.0, 0.1), (), "share a bearing"),
        ((0.0, 1.0, 2.0), (), "far finer"),
        ((0.0, 0.2), (0, 1), "no usable column"),
    ],
)
def test_strips_that_cannot_be_laid_are_refused(bearings, blind, message):
    """Each by a ConfigError that says why."""
    with pytest.raises(ConfigError, match=message):
        lay_on_ring(Strip(bearings, blind=blind), 16, 2)

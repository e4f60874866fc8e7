"""Growing nodes on the range axis, against their formula and NumPy's interpolation."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.scale import RangeScale

SCALE = RangeScale(first_m=0.15, growth=0.06, max_range_m=6.0)
NODES_M = 0.15 * (np.exp(0.06 * np.arange(60)) - 1) / 0.06


def test_nodes_stand_where_the_formula_says():
    """first (e^(growth i) - 1) / growth."""
    assert_allclose(SCALE.range_at(np.arange(60)), NODES_M, rtol=1e-12)


def test_the_last_node_is_the_first_at_or_beyond_the_maximum_range():
    """Counted on the formula's own nodes."""
    assert SCALE.nodes == np.searchsorted(NODES_M, 6.0) + 1


def test_a_maximum_range_on_a_node_needs_no_node_more():
    """Rounding must not add an empty node."""
    assert RangeScale(0.15, 0.06, float(NODES_M[20])).nodes == 21


def test_position_undoes_range():
    """There and back on ordinary ranges."""
    ranges = np.linspace(0, 6, 50)
    assert_allclose(SCALE.range_at(SCALE.position(ranges)), ranges, atol=1e-12)


def test_hats_interpolate_linearly_in_the_scales_own_coordinate():
    """NumPy's interp over node numbers, fed with positions inverted from the formula."""
    table = np.cos(np.arange(SCALE.nodes))
    ranges = np.linspace(0, 6, 101)
    lower, weight = SCALE.hats(ranges)
    position = np.log(1 + 0.06 * ranges / 0.15) / 0.06
    expected = np.interp(position, np.arange(SCALE.nodes), table)
    assert_allclose(table[lower] * (1 - weight) + table[lower + 1] * weight, expected, atol=1e-12)


@pytest.mark.parametrize("beyond", [6.0, 7.0, np.inf])
def test_ranges_beyond_the_maximum_count_as_the_maximum(beyond):
    """Infinity too."""
    assert_array_equal(SCALE.hats(beyond), SCALE.hats(6.0))

"""Rings in few bytes: what rounding costs, and what it may not touch."""

from dataclasses import replace

import numpy as np
import pytest

from learnfilter.export.rings import as_shipped, packed
from tests.shipping import model_of, rehearsed, rendered


def with_rings(bearings: int, finishes: int = 3, seed: int = 0):
    """The rehearsal's cells with drawn rings; some bearings meet nothing."""
    site, rng = rendered()[0], np.random.default_rng(seed)
    shape = site.n_cells, bearings
    range_m = rng.uniform(0, site.max_range_m, shape).astype(np.float32)
    range_m[rng.random(shape) < 0.1] = np.inf
    return replace(
        site,
        layout=replace(site.layout, bearings=bearings),
        range_m=range_m,
        unsure=rng.random(shape) < 0.3,
        finish=rng.integers(-1, finishes, shape).astype(np.int16),
        palette=rng.random((finishes, 3)).astype(np.float32),
    )


@pytest.mark.parametrize(("precision", "codes"), [("fp32", 65534), ("fp16", 65534), ("int8", 254)])
def test_ranges_are_right_to_half_a_code(precision, codes):
    """Codes are even steps of the root of a range; nothing within reach stays so."""
    site = with_rings(64)
    found = as_shipped(site, False, precision).range_m
    near = np.isfinite(site.range_m)
    np.testing.assert_array_equal(np.isfinite(found), near)
    apart = np.sqrt(found[near] / site.max_range_m) - np.sqrt(site.range_m[near] / site.max_range_m)
    assert np.abs(apart).max() <= 0.5 / codes + 1e-7  # float32 roots


@pytest.mark.parametrize("precision", ["fp32", "int8"])
def test_packing_twice_changes_nothing(precision):
    """What was read back can be shipped again."""
    once = as_shipped(with_rings(64), True, precision)
    again = as_shipped(once, True, precision)
    np.testing.assert_array_equal(again.range_m, once.range_m)
    np.testing.assert_array_equal(again.field_m, once.field_m)


@pytest.mark.parametrize("bearings", [64, 61])
@pytest.mark.parametrize("finishes", [0, 3, 255, 256])
def test_doubt_and_finishes_are_kept_exactly(bearings, finishes):
    """Bits that do not fill their last byte, and more finishes than a byte can name."""
    site = with_rings(bearings, finishes)
    found = as_shipped(site, False, "fp32")
    np.testing.assert_array_equal(found.unsure, site.unsure)
    np.testing.assert_array_equal(found.finish, site.finish)


@pytest.mark.parametrize("precision", ["fp32", "int8"])
def test_the_endpoint_model_loses_nothing(precision):
    """Its classes of distance are the steps that are stored."""
    model = model_of("endpoint+colour").part("endpoint")
    expected = model.read(rendered()[0])[0]
    np.testing.assert_array_equal(model.read(as_shipped(rendered()[0], True, precision))[0], expected)


def test_a_thousand_square_metres_fit_their_budget():
    """16,000 cells of 0.25 m and 128 bearings are 6.5 MB of the 10 MB that a whole bundle may take."""
    arrays, _ = packed(with_rings(128), False, "fp32")
    a_cell = sum(array.nbytes for name, array in arrays.items() if name != "palette") / rendered()[0].n_cells
    assert a_cell == 128 * 3 + 128 / 8 + 4
    assert 16_000 * a_cell < 6.5e6


def test_the_tests_site_is_as_shipped():
    """Tests of the runtime compare with torch on the very rings that a bundle holds."""
    np.testing.assert_array_equal(as_shipped(rendered()[0], True, "fp32").range_m, rehearsed()[0].range_m)
    assert not np.array_equal(rendered()[0].range_m, rehearsed()[0].range_m)

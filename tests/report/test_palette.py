"""The scale of beliefs and the pictures made with it."""

import base64
import io

import numpy as np
import pytest
from PIL import Image

from learnfilter.core.errors import ShapeError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.render.site import Site
from learnfilter.report.palette import (
    LEVELS,
    LOOKS,
    MASS_FLOOR,
    belief_image,
    downsample,
    mass_levels,
    png_uri,
    scale_colours,
    value_levels,
)


def test_mass_levels_are_logarithmic_between_the_floor_and_certainty():
    """Nothing and the floor are level 0, one is the top, and the geometric mean lies halfway."""
    mass = np.array([0.0, MASS_FLOOR, np.sqrt(MASS_FLOOR), 1.0])
    top = LEVELS - 1
    assert mass_levels(mass).tolist() == [0, 0, round(top / 2), top]


@pytest.mark.parametrize(("rows", "columns"), [(5, 7), (96, 96), (97, 10), (250, 301)])
def test_downsampling_keeps_the_total_and_fits(rows, columns):
    """Blocks are summed: no mass is lost at the ragged edge."""
    mass = np.random.default_rng(0).random((2, rows, columns))
    small, block = downsample(mass)
    assert max(small.shape[1:]) <= 96 and small.shape[1] * block >= rows
    np.testing.assert_allclose(small.sum(axis=(1, 2)), mass.sum(axis=(1, 2)), rtol=1e-12)  # float64 sums


def test_downsampling_sums_the_right_cells():
    """A block of the small array is the sum of its own cells."""
    mass = np.arange(200.0 * 4).reshape(1, 200, 4)
    small, block = downsample(mass)
    assert block == 3
    assert small[0, 1, 0] == mass[0, 3:6, 0:3].sum()


@pytest.mark.parametrize("look", LOOKS)
def test_a_picture_decodes_to_the_colours_of_its_levels(look):
    """Pillow reads back exactly the RGBA that the levels stand for."""
    levels = np.arange(LEVELS, dtype=np.uint8).reshape(4, -1)
    data = base64.b64decode(png_uri(levels, look).removeprefix("data:image/png;base64,"))
    got = np.asarray(Image.open(io.BytesIO(data)).convert("RGBA"))
    np.testing.assert_array_equal(got, scale_colours(look)[levels])


@pytest.mark.parametrize(("look", "sign"), [("by-day", -1), ("by-night", 1)])
def test_the_scale_is_monotone_in_lightness(look, sign):
    """More mass is always darker on light paper and lighter on dark (relative luminance, IEC 61966-2-1)."""
    srgb = scale_colours(look)[:, :3] / 255
    linear = np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)
    assert (sign * np.diff(linear @ [0.2126, 0.7152, 0.0722]) > 0).all()


def test_values_that_are_missing_take_the_clear_level():
    """NaN is level 0; the extremes take the ends of the rest and are returned."""
    levels, low, high = value_levels(np.array([[np.nan, -2.0, 6.0]]))
    assert (levels.tolist(), low, high) == ([[0, 1, LEVELS - 1]], -2.0, 6.0)


@pytest.fixture
def site() -> Site:
    """Two rows of three cells, of which the upper right one is not live."""
    grid = PoseGrid(2, 2, 3, 0.5, 0.0, 0.0)
    live = np.array([[True, True, True], [True, True, False]])
    layout = lay_on_ring(Strip(even_strip(-45, 45, 3)), 2, 4)
    rings = np.zeros((5, 8))
    nothing = np.zeros((5, 8), np.int16)
    cells = np.argwhere(live).astype(np.int32)
    palette = np.zeros((1, 3), np.float32)
    return Site("s", grid, layout, 6.0, cells, live, rings, rings > 0, nothing, palette, rings, 1, "key")


def test_a_belief_picture_has_north_on_top_and_grey_where_nobody_stands(site):
    """Certainty in the lower left cell is the darkest pixel of the bottom row; the dead cell is grey."""
    log_belief = np.full((2, 2, 3), -np.inf)
    log_belief[1, 0, 0] = 0.0
    image = belief_image(site, log_belief)
    assert image.dtype == np.uint8
    assert image[1, 0].tolist() == scale_colours("by-day")[-1, :3].tolist()
    assert image[0, 2].tolist() == [150, 150, 150]
    assert image[0, 0].tolist() == [255, 255, 255]


def test_a_belief_of_another_lattice_is_refused(site):
    """The picture's axes are the site's."""
    with pytest.raises(ShapeError, match="log_belief"):
        belief_image(site, np.zeros((2, 3, 2)))

"""Distances to the nearest surface against closed forms and shapely."""

import numpy as np
import pytest
import shapely
from numpy.testing import assert_allclose

from learnfilter.core.errors import ConfigError
from learnfilter.core.grid import PoseGrid
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, UNKNOWN, WINDOW
from learnfilter.render.field import CAP_M, distance_field, distance_lattice
from tests.render.shapes import plan_of, rectangle

# float32 of at most 2 m
FLOAT32 = 2.4e-7


def test_distance_grows_by_one_pitch_a_row_from_a_wall():
    """A wall through the centres of row 0, pitch 0.1: 0, 0.1, 0.2, 0.3."""
    field = distance_lattice([[-9, 0.05, 9, 0.05]], 0, 0, 0.1, 4, 3, 5.0)
    assert_allclose(field, np.repeat([[0.0], [0.1], [0.2], [0.3]], 3, axis=1), atol=FLOAT32)


def test_inside_a_rectangle_the_nearest_side_counts():
    """min(x, y, W - x, H - y) at every centre."""
    field = distance_lattice(rectangle(0, 0, 4, 3), 0, 0, 0.25, 12, 16, 5.0)
    x, y = (np.arange(16) + 0.5) * 0.25, ((np.arange(12) + 0.5) * 0.25)[:, None]
    expected = np.minimum(np.minimum(x, 4 - x), np.minimum(y, 3 - y))
    assert_allclose(field, expected, atol=FLOAT32)


@pytest.mark.parametrize("cap_m", [0.3, 1.0, 30.0])
def test_any_segments_agree_with_shapely(cap_m):
    """Sloping, axis-parallel and zero-length segments, near and far, cut off at the cap."""
    rng = np.random.default_rng(8)
    lines = rng.uniform(-1, 6, (25, 4))
    lines[0, 2:], lines[1, 2], lines[2, 3] = lines[0, :2], lines[1, 0], lines[2, 1]
    field = distance_lattice(lines, 0.1, -0.2, 0.17, 30, 25, cap_m)
    x, y = np.meshgrid(0.1 + (np.arange(25) + 0.5) * 0.17, -0.2 + (np.arange(30) + 0.5) * 0.17)
    everything = shapely.multilinestrings(shapely.linestrings(lines.reshape(-1, 2, 2)))
    expected = np.minimum(shapely.distance(shapely.points(x, y), everything), cap_m)
    assert_allclose(field, expected, atol=2e-6)  # float32 of at most 8 m


@pytest.mark.parametrize(
    ("said", "windows", "is_surface"),
    [
        ({"kind": DOOR, "state": SHUT}, "unsure", True),
        ({"kind": DOOR, "state": OPEN}, "unsure", False),
        ({"kind": DOOR, "state": UNKNOWN}, "unsure", False),
        ({"kind": WINDOW}, "unsure", True),
        ({"kind": WINDOW}, "solid", True),
        ({"kind": WINDOW}, "clear", False),
    ],
)
def test_doors_and_windows_are_surfaces_as_they_stand(said, windows, is_surface):
    """A door or window 0.5 m off the only cell's centre, a wall beyond the cap."""
    plan = plan_of(([9, 0, 9, 1], {}), ([1, 0, 1, 1], said))
    field = distance_field(plan, PoseGrid(1, 1, 1, 1.0, 0.0, 0.0), scale=1, windows=windows)
    assert_allclose(field, 0.5 if is_surface else CAP_M)


def test_sub_cells_divide_the_grids_cells():
    """Two by three cells of 1 m at scale 4: centres at 0.125, 0.375, ... from the corner."""
    field = distance_field(plan_of(([-9, 5, 9, 5], {})), PoseGrid(1, 2, 3, 1.0, 0.0, 5.0), scale=4)
    assert field.shape == (8, 12)
    assert_allclose(field[:, 0], (np.arange(8) + 0.5) / 4)


def test_an_empty_lattice_is_refused():
    """No rows."""
    with pytest.raises(ConfigError):
        distance_lattice([[0, 0, 1, 1]], 0, 0, 0.1, 0, 3, 1.0)

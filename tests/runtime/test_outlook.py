"""What places promise, in a square room whose ranges shapely knows."""

import numpy as np
import pytest
import shapely

from learnfilter.core.estimate import Mode
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.runtime.outlook import MARGIN, MODES, SECTORS, expect, look_out, pooled, stand_ins
from learnfilter.runtime.site import RobotSite

CELL_M, SIDE, REACH_M = 0.5, 10, 4.0
GRID = PoseGrid(16, SIDE, SIDE, CELL_M, 0.0, 0.0)
STRIP = Strip(even_strip(-42.1875, 5.625, 16), 0.1, REACH_M)
LAYOUT = lay_on_ring(STRIP, 16, 4)
WALLS = shapely.box(0, 0, 5, 5).exterior
RED, BLUE = (0.8, 0.1, 0.1), (0.1, 0.1, 0.7)
STAY, AHEAD, TURN = (0.0, 0.0, 0.0), (CELL_M, 0.0, 0.0), (0.0, 0.0, np.pi / 2)


def ranges(x, y, angles):
    """[p] metres to the walls by shapely."""
    ends = np.stack([x + 20 * np.cos(angles), y + 20 * np.sin(angles)], axis=1)
    rays = shapely.linestrings([[(x, y), end] for end in ends])
    return shapely.distance(shapely.Point(x, y), shapely.intersection(rays, WALLS))


@pytest.fixture(scope="module")
def site() -> RobotSite:
    """Live but for the cells along the walls; the upper half of the compass is red, the lower blue."""
    cells = np.argwhere(np.pad(np.ones((SIDE - 2, SIDE - 2), bool), 1))
    angles = LAYOUT.ring_angles()
    range_m = np.array([ranges(GRID.x_centres()[c], GRID.y_centres()[r], angles) for r, c in cells])
    finish = np.broadcast_to((np.sin(angles) < 0).astype(np.int16), range_m.shape).copy()
    unsure = np.zeros(range_m.shape, bool)
    palette = np.array([RED, BLUE], np.float32)
    return RobotSite(GRID, LAYOUT, cells, range_m.astype(np.float32), unsure, finish, palette, None, 1)


@pytest.fixture(scope="module")
def near(site):
    index = np.full(GRID.shape[1:], -1, np.int32)
    index[tuple(site.cells.T)] = np.arange(len(site.cells))
    return stand_ins(index)


def at(row, column, heading_bin=0):
    return np.array([GRID.x_centres()[column], GRID.y_centres()[row], heading_bin * GRID.heading_step_rad])


@pytest.mark.parametrize(
    ("motion", "end"),
    [(STAY, at(4, 5, 4)), (AHEAD, at(5, 5, 4)), (TURN, at(4, 5, 8)), ((0, CELL_M, 0), at(4, 4, 4))],
)
def test_the_plan_is_seen_from_where_a_motion_ends(site, near, motion, end):
    """From (row 4, column 5) facing up: ranges by shapely at the end, 1e-5 for float32."""
    seen, _ = expect(at(4, 5, 4)[None], np.array([motion]), site, near)
    expected = ranges(*end[:2], end[2] + np.array(STRIP.bearings_rad))
    np.testing.assert_allclose(seen[0, 0], expected, rtol=0, atol=1e-5)


def test_colours_are_those_of_the_finishes(site, near):
    """Facing up all is red, facing down all is blue."""
    _, colour = expect(np.array([at(4, 4, 4), at(4, 4, 12)]), np.array([STAY]), site, near)
    np.testing.assert_allclose(colour[:, 0], np.stack([[RED] * 16, [BLUE] * 16]), rtol=1e-6)


def test_a_motion_into_a_wall_cell_shows_the_view_of_the_live_cell_beside_it(site, near):
    """From the last live column facing right; the nearest live cell is the one it came from."""
    ahead, stay = expect(at(4, SIDE - 2)[None], np.array([AHEAD, STAY]), site, near)[0][0]
    np.testing.assert_array_equal(ahead, stay)


def test_a_motion_out_of_the_site_shows_the_view_before_it(site, near):
    """Even of a motion that would have turned."""
    gone, stay = expect(at(4, 5)[None], np.array([(9.0, 0.0, 1.0), STAY]), site, near)[0][0]
    np.testing.assert_array_equal(gone, stay)


@pytest.mark.parametrize(("row", "column"), [(0, 0), (0, 5), (4, 4), (SIDE - 1, SIDE - 1), (-1, 4)])
def test_the_nearest_live_cell_stands_in(site, near, row, column):
    """By exhaustive search over the live cells."""
    away = ((site.cells - [row, column]) ** 2).sum(axis=1)
    assert away[near[row + MARGIN, column + MARGIN]] == away.min()


@pytest.mark.parametrize(("row", "column"), [(-2, 4), (4, -2), (SIDE + 1, SIDE - 1)])
def test_three_cells_from_live_ground_none_stands_in(near, row, column):
    """Two are allowed."""
    assert near[row + MARGIN, column + MARGIN] == -1


def test_an_unsure_bearing_and_an_unknown_finish_promise_nothing(site, near):
    """NaN, as where nothing came back."""
    unsure, finish = site.unsure.copy(), site.finish.copy()
    unsure[:, ::2], finish[:, ::2] = True, -1
    blind = RobotSite(GRID, LAYOUT, site.cells, site.range_m, unsure, finish, site.palette, None, 1)
    range_m, colour = expect(at(4, 4)[None], np.array([STAY]), blind, near)
    assert np.isnan(range_m).sum() == 8 and np.isnan(colour).all(axis=-1).sum() == 8


def test_a_sector_is_the_mean_of_what_is_known():
    """Two columns a sector: 1 and 3 m of 4 are half; a missing one leaves the other; 4 is the most."""
    range_m = np.tile([2.0, 2.0], SECTORS)
    range_m[:8] = 1.0, 3.0, np.nan, 1.0, np.nan, np.nan, np.inf, 9.0
    view = pooled(range_m.astype(np.float32), None, REACH_M)
    np.testing.assert_allclose(view[:SECTORS], [0.5, 0.25, 0, 1, 0.5, 0.5, 0.5, 0.5])


def test_a_colour_is_the_mean_of_what_is_known():
    """Red beside nothing is red, red beside blue their mean, nothing is black."""
    colour = np.full((16, 3), np.nan, np.float32)
    colour[0], colour[2], colour[3] = RED, RED, BLUE
    red = pooled(np.ones(16, np.float32), colour, REACH_M)[SECTORS : 2 * SECTORS]
    np.testing.assert_allclose(red, [0.8, 0.45, 0, 0, 0, 0, 0, 0], rtol=1e-6)


def glance(site, near, modes, rgb=True):
    depth = ranges(*at(4, 5)[:2], np.array(STRIP.bearings_rad)).astype(np.float32)
    colour = np.full((16, 3), 0.5, np.float32) if rgb else None
    motions, nothing = np.array([STAY, AHEAD]), np.log(len(site.cells) * 16)
    return look_out(modes, motions, site, near, depth, colour, nothing / 2, REACH_M)


def mode(pose, mass):
    return Mode(np.asarray(pose, float), mass, np.zeros((3, 3)))


def test_where_the_robot_is_it_sees_what_is_promised(site, near):
    """The range part of the view from the true mode is that of the strip; 1e-5 for float32."""
    outlook = glance(site, near, [mode(at(4, 5), 0.9)])
    np.testing.assert_allclose(outlook.view[0, 0, :SECTORS], outlook.seen[:SECTORS], rtol=0, atol=1e-5)


def test_places_are_seen_from_the_heaviest(site, near):
    """It faces up; the other lies 1 m up and 0.5 m to the right, and faces right."""
    outlook = glance(site, near, [mode(at(4, 5, 4), 0.6), mode(at(6, 6, 0), 0.3)])
    np.testing.assert_allclose(outlook.place[:2], [[0, 0, 1, 0], [1, -0.5, 0, -1]], rtol=0, atol=1e-6)


def test_rows_beyond_the_last_mode_are_dark(site, near):
    """Shares say which rows count."""
    outlook = glance(site, near, [mode(at(4, 5), 0.6), mode(at(6, 6), 0.3)])
    np.testing.assert_allclose(outlook.share, [0.6, 0.3, 0, 0, 0, 0], rtol=1e-6)
    assert outlook.view.shape == (MODES, 2, 32) and not outlook.view[2:].any()


def test_more_modes_than_rows_are_left_out(site, near):
    """The heaviest come first."""
    outlook = glance(site, near, [mode(at(4, 5), 0.2 - 0.01 * k) for k in range(9)])
    np.testing.assert_allclose(outlook.share, 0.2 - 0.01 * np.arange(MODES), rtol=1e-6)


def test_entropy_is_a_share_of_knowing_nothing(site, near):
    """Half the nats of a uniform belief were given."""
    assert glance(site, near, [mode(at(4, 5), 1.0)]).entropy == pytest.approx(0.5)


def test_a_sensor_without_colour_is_promised_none(site, near):
    """Else places would differ in what it cannot see."""
    outlook = glance(site, near, [mode(at(4, 5), 1.0)], rgb=False)
    assert not outlook.view[..., SECTORS:].any() and not outlook.seen[SECTORS:].any()

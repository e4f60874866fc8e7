"""Where a robot can be, on plans whose answer can be counted by hand."""

import numpy as np
import pytest
import shapely
from numpy.testing import assert_array_equal

from learnfilter.core.errors import ConfigError, PlanError
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, SOLID, UNKNOWN
from learnfilter.render.live import grid_for, live_cells
from tests.render.shapes import plan_of, rectangle, walls

CELL = 0.25
RADIUS = 0.25


def live_of(plan, radius=RADIUS, cell=CELL):
    """The lattice and a function that says whether the cell at (x, y) is live."""
    grid = grid_for(plan, 8, cell)
    live = live_cells(plan, grid, radius)
    return live, lambda x, y: bool(live[grid.cell_of(x, y)])


def two_rooms(door_from, door_to, *parts, **members):
    """A 4 x 3 m room (left) and a 3 x 3 m room, with an opening in the wall between them."""
    between = [[4, 0, 4, door_from], [4, door_to, 4, 3]]
    return plan_of((rectangle(0, 0, 7, 3), {}), (between, {}), *parts, **members)


def test_the_grid_covers_the_plan_and_one_cell_more():
    """4 x 3 m in cells of 0.25 m: 16 + 2 columns, 12 + 2 rows."""
    grid = grid_for(walls(rectangle(1, 2, 5, 5)), 8, 0.25)
    assert (grid.shape, grid.left_m, grid.bottom_m) == ((8, 14, 18), 0.75, 1.75)


def test_a_grid_covers_what_does_not_divide_into_cells():
    """4.1 m need 17 cells."""
    assert grid_for(walls(rectangle(0, 0, 4.1, 3)), 8, 0.25).columns == 19


def test_an_empty_grid_is_refused():
    """No headings."""
    with pytest.raises(ConfigError):
        grid_for(walls(rectangle(0, 0, 4, 3)), 0, 0.25)


def test_cells_of_a_room_keep_the_radius_from_its_walls():
    """Centres at 0.375 ... 3.625 by 0.375 ... 2.625: 14 x 10 cells."""
    live, _ = live_of(walls(rectangle(0, 0, 4, 3)))
    expected = np.zeros((14, 18), bool)
    expected[2:-2, 2:-2] = True
    assert_array_equal(live, expected)


@pytest.mark.parametrize(("state", "joined"), [(OPEN, True), (UNKNOWN, True), (SHUT, False)])
def test_open_and_unknown_doors_join_rooms_and_shut_ones_do_not(state, joined):
    """The smaller room is live only through the door; the larger one always."""
    _, at = live_of(two_rooms(1, 2, ([4, 1, 4, 2], {"kind": DOOR, "state": state})))
    assert at(2, 1.4)
    assert at(5.5, 1.4) is joined


def test_jambs_of_an_open_door_are_walls():
    """In the doorway only what is clear of both jambs is live: y in 1.25 ... 1.75."""
    plan = two_rooms(1, 2, ([4, 1, 4, 2], {"kind": DOOR, "state": OPEN}))
    grid = grid_for(plan, 8, CELL)
    column = int(grid.cell_of(4.1, 0)[1])
    # the cell's centre is 0.125 m beside the wall, so the jamb is sqrt(0.25^2 - 0.125^2) = 0.217 m off in y
    inside = (grid.y_centres() > 1 + 0.217) & (grid.y_centres() < 2 - 0.217)
    assert_array_equal(live_cells(plan, grid, RADIUS)[:, column], inside)


def test_a_doorway_between_two_rows_of_cells_still_joins_its_rooms():
    """0.7 m wide leaves 0.2 m for the robot's middle, which no centre of a 0.25 m cell is in."""
    between = [[4.125, 0, 4.125, 1.15], [4.125, 1.85, 4.125, 3]]
    live, at = live_of(walls(rectangle(0, 0, 7, 3), between))
    assert not live[:, 1 + 16].any()  # the column of cells whose centres lie in the wall's plane
    assert at(2, 1.4)
    assert at(5.5, 1.4)


@pytest.mark.parametrize("shift", np.arange(10) * 0.05)
def test_wherever_a_narrow_doorway_lies_it_joins_its_rooms(shift):
    """1.12 m for a robot of 1 m, in cells of 0.5 m: 0.12 m for its middle, as a finer pitch can see."""
    _, at = live_of(two_rooms(1 + shift, 2.12 + shift), radius=0.5, cell=0.5)
    assert at(2, 1.3)
    assert at(5.7, 1.3)


def test_a_doorway_narrower_than_the_robot_does_not_join():
    """0.45 m for a robot of 0.5 m."""
    _, at = live_of(two_rooms(1.2, 1.65))
    assert at(2, 1.4)
    assert not at(5.5, 1.4)


def test_a_thin_wall_between_cells_holds_a_tiny_robot():
    """A robot of 3 cm radius in cells of 0.5 m does not leak through the wall between two centres."""
    _, at = live_of(two_rooms(1, 1), radius=0.03, cell=0.5)
    assert at(2, 1.4)
    assert not at(5.5, 1.4)


def test_nobody_stands_inside_a_solid_thing():
    """The middle of a 2 x 2 m block is far from its edges and still not live."""
    block = rectangle(1, 0.5, 3, 2.5)
    solids = (np.array([(1, 0.5), (3, 0.5), (3, 2.5), (1, 2.5)]),)
    _, at = live_of(plan_of((rectangle(0, 0, 6, 3), {}), (block, {"kind": SOLID}), solids=solids))
    assert not at(2, 1.5)
    assert at(4, 1.5)


def test_nobody_stands_in_unmapped_area():
    """Up to its edge, not a radius before it."""
    unmapped = (np.array([(3, -1), (9, -1), (9, 9), (3, 9)], float),)
    _, at = live_of(walls(rectangle(0, 0, 6, 3), unmapped=unmapped))
    assert at(2.9, 1.5)
    assert not at(3.1, 1.5)


def test_a_room_open_to_unmapped_area_alone_is_not_outdoors():
    """Nothing is drawn at its left side, and what lies there is unmapped; a smaller room is walled off."""
    unmapped = (np.array([(-9, -9), (0, -9), (0, 12), (-9, 12)], float),)
    three_sides = [[0, 0, 7, 0], [7, 0, 7, 3], [7, 3, 0, 3], [4, 0, 4, 3]]
    _, at = live_of(walls(three_sides, unmapped=unmapped))
    assert at(2, 1.4)
    assert not at(5.5, 1.4)


@pytest.mark.parametrize("state", [OPEN, UNKNOWN])
def test_an_entrance_does_not_let_the_outside_in(state):
    """An L-shaped house whose yard, within the bounds, is larger than the house."""
    house = [
        [0, 0, 10, 0],
        [10, 0, 10, 2],
        [10, 2, 2, 2],
        [2, 2, 2, 4],
        [2, 5, 2, 10],
        [2, 10, 0, 10],
        [0, 10, 0, 0],
    ]
    _, at = live_of(plan_of((house, {}), ([2, 4, 2, 5], {"kind": DOOR, "state": state})))
    assert at(1, 8)
    assert at(8, 1)
    assert not at(6, 6)


def test_an_entrance_without_a_door_does_not_let_the_outside_in():
    """The same house, 1 m of its wall simply missing."""
    house = [
        [0, 0, 10, 0],
        [10, 0, 10, 2],
        [10, 2, 2, 2],
        [2, 2, 2, 4],
        [2, 5, 2, 10],
        [2, 10, 0, 10],
        [0, 10, 0, 0],
    ]
    _, at = live_of(walls(house))
    assert at(1, 8)
    assert at(8, 1)
    assert not at(6, 6)


def test_a_site_open_to_one_side_is_still_a_site():
    """Three walls of a 10 x 10 m bay: its floor is live though it is joined to the outside."""
    _, at = live_of(walls([[0, 10, 0, 0], [0, 0, 10, 0], [10, 0, 10, 10]]))
    assert at(5, 5)


def test_the_seed_chooses_the_room():
    """Two rooms without a door: the seed is in the smaller one."""
    _, at = live_of(two_rooms(1, 1, seed=(6.0, 1.0)))
    assert at(5.5, 1.4)
    assert not at(2, 1.4)


def test_a_seed_indoors_does_not_reach_the_outside_through_an_entrance():
    """Seeded in the house with an open entrance, the yard stays dead."""
    yard = [
        [0, 0, 10, 0],
        [10, 0, 10, 2],
        [10, 2, 2, 2],
        [2, 2, 2, 4],
        [2, 5, 2, 10],
        [2, 10, 0, 10],
        [0, 10, 0, 0],
    ]
    plan = plan_of((yard, {}), ([2, 4, 2, 5], {"kind": DOOR, "state": OPEN}), seed=(1.0, 8.0))
    _, at = live_of(plan)
    assert at(8, 1)
    assert not at(6, 6)


def test_a_seed_outdoors_makes_the_outside_live():
    """A robot for the yard of the same house."""
    yard = [[0, 0, 10, 0], [10, 0, 10, 2], [10, 2, 2, 2], [2, 2, 2, 10], [2, 10, 0, 10], [0, 10, 0, 0]]
    _, at = live_of(walls(yard, seed=(6.0, 6.0)))
    assert at(7, 7)
    assert not at(1, 8)


def test_a_seed_inside_a_solid_thing_is_refused():
    """2 m from the next free place."""
    block = np.array([(1, 1), (6, 1), (6, 6), (1, 6)], float)
    plan = plan_of(
        (rectangle(0, 0, 9, 7), {}),
        (rectangle(1, 1, 6, 6), {"kind": SOLID}),
        solids=(block,),
        seed=(3.5, 3.5),
    )
    with pytest.raises(PlanError, match="seed"):
        live_of(plan)


def test_a_robot_too_large_for_the_plan_is_refused():
    """A radius of 2 m in a room of 4 x 3 m."""
    with pytest.raises(PlanError, match="no cell is free"):
        live_of(walls(rectangle(0, 0, 4, 3)), radius=2.0)


def test_a_robot_without_size_is_refused():
    """Radius zero."""
    with pytest.raises(ConfigError):
        live_of(walls(rectangle(0, 0, 4, 3)), radius=0.0)


def test_live_cells_of_a_real_floor_are_indoors_and_clear(shared_data):
    """Westport floor 3: shapely agrees that all are clear, and they cover a plausible floor area."""
    from learnfilter.plan import read_plan

    plan = read_plan(shared_data / "plans" / "westport-house-floor-3.geojson")
    grid = grid_for(plan, 8, 0.25)
    live = live_cells(plan, grid, 0.25)
    rows, columns = np.nonzero(live)
    points = shapely.points(grid.x_centres()[columns], grid.y_centres()[rows])
    shut = (plan.kind != DOOR) | (plan.state == SHUT)
    barriers = shapely.multilinestrings(shapely.linestrings(plan.segments[shut].reshape(-1, 2, 2)))
    shapely.prepare(barriers)
    assert not shapely.dwithin(barriers, points, 0.249).any()
    # two wings of about 40 x 15 m each and a round hall; its bounding box has 3060 m2
    assert 600 < len(points) * 0.25**2 < 1400

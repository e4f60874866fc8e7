"""Reading WGS84 plans: projection, drawings, indoor-tagged maps, real files."""

import json
import logging

import numpy as np
import pytest
from shapely.geometry import Polygon

from learnfilter.core.errors import PlanError
from learnfilter.plan import read_plan
from learnfilter.plan.floorplan import DOOR, OPEN, SOLID, UNKNOWN, WALL, WINDOW
from learnfilter.plan.geographic import metres_per_radian
from tests.plan.drawing import line, save, shape

# Metres of one degree at the equator: pi/180 of the WGS84 semi-major axis, and of b^2/a (NIMA TR8350.2).
EAST_M, NORTH_M = np.radians(6378137.0), np.radians(6356752.3142**2 / 6378137.0)
# The maps below lie near the equator, 10 m a unit or so, where these are exact to 1e-9.
CLOSE_M = 1e-6


@pytest.fixture
def file(tmp_path):
    return tmp_path / "map.geojson"


def degrees(x_m: float, y_m: float) -> list[float]:
    """A place near (0, 0) of the map, given in metres."""
    return [x_m / EAST_M, y_m / NORTH_M]


def box(left, bottom, right, top) -> list[list[list[float]]]:
    """Coordinates of a rectangle given in metres."""
    corners = [(left, bottom), (right, bottom), (right, top), (left, top), (left, bottom)]
    return [[degrees(*corner) for corner in corners]]


def room(left, bottom, right, top, indoor="room", **properties) -> dict:
    return shape("Polygon", box(left, bottom, right, top), indoor=indoor, **properties)


def at(plan, x, y):
    """The point in the plan's frame, whose (0, 0) is the middle of the map."""
    return np.array([x, y]) - np.array(plan.origin) * (EAST_M, NORTH_M)


def length_of(plan, kind) -> float:
    along = plan.segments[:, 2:] - plan.segments[:, :2]
    return float(np.hypot(*along[plan.kind == kind].T).sum())


def total(plan) -> float:
    along = plan.segments[:, 2:] - plan.segments[:, :2]
    return float(np.hypot(*along.T).sum())


@pytest.mark.parametrize(
    "latitude, east, north",
    [
        (0, 6378137.0, 6356752.3142**2 / 6378137.0),  # a and b^2 / a
        (90, 0, 6399593.6258),  # polar radius of curvature, NIMA TR8350.2 table 3.3
        (-90, 0, 6399593.6258),
    ],
)
def test_radii_are_those_of_the_ellipsoid(latitude, east, north):
    """Closed forms at the equator and the poles, to the millimetre the source gives."""
    assert metres_per_radian(latitude) == pytest.approx((east, north), abs=1e-3)


def test_the_middle_of_the_map_is_the_origin(file):
    """Degrees of the bounding box's middle, which becomes (0, 0)."""
    plan = read_plan(save(file, line((7, 50), (7.002, 50), (7.002, 50.004), type="wall"), member=None))
    assert plan.origin == pytest.approx((7.001, 50.002))
    left, bottom, right, top = plan.bounds
    # differences of degrees carry 7e-15 degrees, which is a nanometre
    assert (left + right, bottom + top) == pytest.approx((0, 0), abs=1e-7)


def test_an_old_crs_member_is_ignored(file, shared_data):
    """It stands in the real file and says what RFC 7946 says anyway."""
    path = shared_data / "plans" / "westport-house-floor-gf.geojson"
    document = json.loads(path.read_text())
    del document["crs"]
    file.write_text(json.dumps(document))
    assert read_plan(file).content_hash() == read_plan(path).content_hash()


def test_a_wall_is_solid_with_wall_surfaces(file):
    """Its body is drawn."""
    plan = read_plan(save(file, shape("Polygon", box(0, 0, 5, 0.2), type="wall"), member=None))
    assert plan.kind.tolist() == [WALL] * 4
    assert Polygon(plan.solids[0]).area == pytest.approx(1, abs=1e-5)


def test_a_door_is_the_line_along_its_middle(file):
    """A bar of 0.9 x 0.2 m: the leaf is 0.9 m long, and nobody knows how it stands."""
    plan = read_plan(save(file, shape("Polygon", box(0, 0, 0.2, 0.9), type="door"), member=None))
    ends = plan.segments.reshape(2, 2)
    assert sorted(ends.tolist()) == [
        pytest.approx([0, -0.45], abs=CLOSE_M),
        pytest.approx([0, 0.45], abs=CLOSE_M),
    ]
    assert (plan.kind.tolist(), plan.state.tolist()) == ([DOOR], [UNKNOWN])


def test_a_window_keeps_its_outline_and_nobody_stands_in_it(file):
    """So that it meets the walls beside it, straight or bent."""
    plan = read_plan(save(file, shape("Polygon", box(0, 0, 3, 0.3), type="window"), member=None))
    assert plan.kind.tolist() == [WINDOW] * 4
    assert len(plan.solids) == 1


@pytest.mark.parametrize("word", ["stairs", "elevator"])
def test_stairs_and_lifts_are_unmapped(file, word):
    """What is behind them changes, and a robot on wheels stays off."""
    wall, area = line(degrees(0, 0), degrees(9, 0), type="wall"), shape("Polygon", box(0, 0, 3, 3), type=word)
    plan = read_plan(save(file, wall, area, member=None))
    assert (len(plan.segments), len(plan.unmapped)) == (1, 1)


def test_labels_of_a_drawing_make_no_walls(file):
    """Rooms and the slab's outline are drawn over the walls."""
    wall = line(degrees(0, 0), degrees(9, 0), type="wall")
    labels = [
        shape("Polygon", box(0, 0, 3, 3), type=word) for word in ("room", "corridor", "building_outline")
    ]
    assert len(read_plan(save(file, wall, *labels, member=None)).segments) == 1


def test_an_unknown_type_is_ignored_and_said(file, caplog):
    """Nothing disappears in silence."""
    wall = line(degrees(0, 0), degrees(9, 0), type="wall")
    with caplog.at_level(logging.WARNING):
        read_plan(save(file, wall, shape("Polygon", box(0, 0, 1, 1), type="bench"), member=None))
    assert "bench" in caplog.text


def test_more_words_can_be_given_a_meaning(file):
    """For drawings with their own words."""
    bench = shape("Polygon", box(0, 0, 1, 1), type="bench")
    assert read_plan(save(file, bench, member=None), meanings={"bench": "solid"}).kind.tolist() == [SOLID] * 4


def test_a_meaning_nobody_knows_is_refused(file):
    """Expected ones are listed."""
    bench = shape("Polygon", box(0, 0, 1, 1), type="bench")
    with pytest.raises(PlanError, match=r"no such meaning.*solid"):
        read_plan(save(file, bench, member=None), meanings={"bench": "sofa"})


def test_a_wall_between_two_rooms_comes_once(file):
    """Two rooms of 4 x 3 m side by side: 7 walls, 2 x 14 - 3 = 25 m in all."""
    plan = read_plan(save(file, room(0, 0, 4, 3), room(4, 0, 8, 3), member=None))
    assert (len(plan.segments), total(plan)) == (7, pytest.approx(25, abs=1e-5))


@pytest.mark.parametrize(
    "first, second, metres",
    [("corridor", "corridor", 22), ("corridor", "area", 11), ("corridor", "room", 25)],
)
def test_corridors_flow_into_each_other_and_not_into_rooms(file, first, second, metres):
    """4 x 3 m each, side by side: the 3 m they share are open, and an area has no walls of its own."""
    plan = read_plan(save(file, room(0, 0, 4, 3, first), room(4, 0, 8, 3, second), member=None))
    assert total(plan) == pytest.approx(metres, abs=1e-5)


def door(x, y, word="yes", **properties) -> dict:
    return shape("Point", degrees(x, y), door=word, **properties)


@pytest.mark.parametrize("word, state", [("yes", UNKNOWN), ("hinged", UNKNOWN), ("no", OPEN)])
def test_a_door_on_a_wall_opens_it(file, word, state):
    """0.9 m of the 14 m go, around the point, and a door stands there."""
    plan = read_plan(save(file, room(0, 0, 4, 3), door(1.5, 0, word), member=None))
    assert length_of(plan, WALL) == pytest.approx(14 - 0.9, abs=1e-5)
    middle = plan.segments[plan.kind == DOOR].reshape(2, 2).mean(axis=0)
    np.testing.assert_allclose(middle, at(plan, 1.5, 0), atol=1e-5)
    assert plan.state[plan.kind == DOOR].tolist() == [state]


def test_a_door_on_a_corner_stands_beside_it(file):
    """It takes 0.9 m of one wall rather than half of each."""
    plan = read_plan(save(file, room(0, 0, 4, 3), door(0, 0), member=None))
    assert length_of(plan, WALL) == pytest.approx(14 - 0.9, abs=1e-5)
    assert length_of(plan, DOOR) == pytest.approx(0.9, abs=1e-5)


def test_a_door_on_a_node_of_a_straight_wall_spans_both_parts(file):
    """Maps put a node where a door is."""
    corners = [degrees(*corner) for corner in [(0, 0), (1.5, 0), (4, 0), (4, 3), (0, 3), (0, 0)]]
    plan = read_plan(save(file, shape("Polygon", [corners], indoor="room"), door(1.5, 0), member=None))
    middle = plan.segments[plan.kind == DOOR].reshape(2, 2).mean(axis=0)
    np.testing.assert_allclose(middle, at(plan, 1.5, 0), atol=1e-5)


def test_a_door_between_two_rooms_opens_their_one_wall(file):
    """Both rooms carry the wall, none may stay behind the door."""
    plan = read_plan(
        save(file, room(0, 0, 4, 3), room(4, 0, 8, 3), door(4, 1), member=None), door_width_m=1.2
    )
    assert length_of(plan, WALL) == pytest.approx(25 - 1.2, abs=1e-5)


def test_a_door_far_from_every_wall_is_left_out(file):
    """Its wall is not on the map."""
    plan = read_plan(save(file, room(0, 0, 4, 3), door(9, 9), member=None))
    assert plan.kind.tolist() == [WALL] * 4


def test_doors_without_width_are_refused(file):
    """They would open nothing."""
    with pytest.raises(PlanError, match="door_width_m > 0, got 0"):
        read_plan(save(file, room(0, 0, 4, 3), door(1, 0), member=None), door_width_m=0)


def test_several_levels_must_be_chosen_from(file):
    """The message lists them."""
    path = save(file, room(0, 0, 4, 3, level="0"), room(0, 0, 4, 3, level="1;2"), member=None)
    with pytest.raises(PlanError, match="level: the plan has several levels; expected 0 or 1 or 2"):
        read_plan(path)


@pytest.mark.parametrize("level, rooms", [(0, 2), ("0", 2), (1, 2), (2, 3)])
def test_a_level_holds_what_says_so_and_what_says_nothing(file, level, rooms):
    """The first room is on 0 and 2, the second on 1 and 2, the third on every level."""
    levels = {"level": "0;2"}, {"level": "1; 2"}, {}
    features = [room(10 * i, 0, 10 * i + 4, 3, **where) for i, where in enumerate(levels)]
    plan = read_plan(save(file, *features, member=None), level=level)
    assert len(plan.segments) == 4 * rooms


def test_a_range_of_levels_holds_those_between(file):
    """`-1-2` is -1, 0, 1 and 2."""
    path = save(file, room(0, 0, 4, 3, level="-1-2"), member=None)
    with pytest.raises(PlanError, match="-1 or 0 or 1 or 2"):
        read_plan(path)


def test_a_level_that_is_not_there_is_refused(file):
    """With those that are."""
    with pytest.raises(PlanError, match="no such level; expected 0, got 7"):
        read_plan(save(file, room(0, 0, 4, 3, level="0"), member=None), level=7)


def test_metres_without_the_member_are_found_out(file):
    """Nothing on Earth is at longitude 400."""
    with pytest.raises(PlanError, match="feature 0: not degrees"):
        read_plan(save(file, line((0, 0), (400, 0), type="wall"), member=None))


def test_a_map_without_walls_is_refused(file):
    """A shop's point makes no plan."""
    with pytest.raises(PlanError, match="no feature means a wall"):
        read_plan(save(file, shape("Point", [0, 0], shop="books"), member=None))


def test_a_door_without_area_is_refused(file):
    """Its line could not be told."""
    flat = [[[0, 0], [1e-5, 0], [2e-5, 0], [0, 0]]]
    with pytest.raises(PlanError, match=r"feature 0.*without area"):
        read_plan(save(file, shape("Polygon", flat, type="door"), member=None))


def test_the_hotel_floor_has_its_walls_and_doors(shared_data):
    """WRLD (CC BY 4.0): 1608 segments of walls and windows, about 48 x 64 m (data/NOTE.md); 122 doors."""
    plan = read_plan(shared_data / "plans" / "westport-house-floor-3.geojson")
    assert ((plan.kind != DOOR).sum(), (plan.kind == DOOR).sum()) == (1608, 122)
    left, bottom, right, top = plan.bounds
    assert (right - left, top - bottom) == pytest.approx((48, 64), abs=1)  # the note is in whole metres


def test_the_mall_has_rooms_and_doors(shared_data):
    """OpenStreetMap contributors (ODbL 1.0): sliding doors and openings (`door=no`) on the corridors."""
    plan = read_plan(shared_data / "plans" / "osm-caserne.geojson", level=0)
    assert OPEN in plan.state[plan.kind == DOOR]
    assert UNKNOWN in plan.state[plan.kind == DOOR]

"""What the checks find, and that they hold their tongue otherwise."""

import pytest

from learnfilter.core.errors import ConfigError
from learnfilter.plan import check_plan, read_plan
from tests.plan.drawing import MEMBER, ROOM, line, save, shape

WHITE = {**MEMBER, "finishes": {"white": [1, 1, 1]}}


@pytest.fixture
def check(tmp_path):
    """Findings about a plan of these features, by short name."""

    def run(*features, member=WHITE, **options):
        plan = read_plan(save(tmp_path / "plan.geojson", *features, member=member))
        return {finding.what: finding for finding in check_plan(plan, **options)}

    return run


def room(left, bottom, right, top, **properties):
    """A rectangle of walls."""
    corners = [(left, bottom), (right, bottom), (right, top), (left, top), (left, bottom)]
    return line(*corners, **{"finish": "white", **properties})


def test_a_sound_room_has_no_findings(check):
    """Else the others mean nothing."""
    assert check(line(*ROOM, finish="white")) == {}


@pytest.mark.parametrize(
    "gap, found", [(0.0, False), (0.01, False), (0.05, True), (0.45, True), (0.55, False)]
)
def test_a_wall_that_stops_just_short_is_found(check, gap, found):
    """Within 0.5 m of another and not touching it; a centimetre is rounding."""
    findings = check(room(0, 0, 6, 5), line((3, 0), (3, 5 - gap), finish="white"))
    assert ("open_end" in findings) == found


def test_an_open_end_says_where_and_how_far(check):
    """Metres and features to look at."""
    finding = check(room(0, 0, 6, 5), line((3, 0), (3, 4.7), finish="white"))["open_end"]
    assert finding.where == (3, 4.7)
    assert "0.30 m" in finding.message
    assert "feature 1" in finding.message and "feature 0" in finding.message


def test_a_stub_is_no_open_end(check):
    """A pilaster of 0.3 m is near the wall it grows from, and whole."""
    assert "open_end" not in check(room(0, 0, 6, 5), line((3, 0), (3, 0.3), finish="white"))


def test_an_end_inside_a_solid_thing_is_no_open_end(check):
    """A wall may run into a column."""
    column = shape("Polygon", [[[2, 2], [4, 2], [4, 4], [2, 4], [2, 2]]], finish="white")
    assert "open_end" not in check(room(0, 0, 6, 5), column, line((3, 0), (3, 2.3), finish="white"))


def test_a_wall_drawn_twice_is_noted(check):
    """Over the 2 m the two share."""
    finding = check(room(0, 0, 6, 5), line((2, 0), (4, 0), finish="white"))["duplicate_walls"]
    assert finding.severity == "note"
    assert "over 2.0 m" in finding.message


def test_a_door_drawn_on_a_whole_wall_is_a_conflict(check):
    """The wall behind it would stay shut for ever."""
    finding = check(room(0, 0, 6, 5), line((2, 0), (3, 0), kind="door", finish="white"))["conflicting_walls"]
    assert finding.severity == "warning"


def test_bodies_that_abut_are_not_drawn_twice(check):
    """Nobody sees the face two solid things share."""
    blocks = [[[2, 2], [3, 2], [3, 3], [2, 3], [2, 2]], [[3, 2], [4, 2], [4, 3], [3, 3], [3, 2]]]
    findings = check(room(0, 0, 6, 5), *(shape("Polygon", [block], finish="white") for block in blocks))
    assert findings == {}


def test_parallel_walls_apart_are_not_drawn_twice(check):
    """A thin wall has two faces, 0.1 m apart."""
    assert check(room(0, 0, 6, 5), line((0, 2.5), (6, 2.5), finish="white"), room(0, 2.6, 6, 5)).keys() <= {
        "duplicate_walls",  # the second room lies on the first
        "island",
    }


def test_an_edge_of_a_millimetre_is_noted(check):
    """A slip of the pen."""
    corners = [(0, 0), (6, 0), (6, 5), (5.999, 5), (0, 5), (0, 0)]
    assert check(line(*corners, finish="white"))["short_walls"].where == (6, 5)


def test_a_room_without_a_door_is_an_island(check):
    """3 x 4 m beside 6 x 5 m: a robot of radius 0.25 m has 2.5 x 3.5 = 8.75 m2 there."""
    finding = check(room(0, 0, 6, 5), room(7, 0, 10, 4))["island"]
    assert "8.8 m2" in finding.message  # 8.75, shown with one decimal
    assert 7 < finding.where[0] < 10


@pytest.mark.parametrize("state, reached", [("open", True), ("unknown", True), ("shut", False)])
def test_a_door_joins_rooms_unless_it_is_shut(check, state, reached):
    """What may be open may be driven through."""
    door = line((3, 2), (3, 3), kind="door", state=state, finish="white")
    walls = line((3, 0), (3, 2), finish="white"), line((3, 3), (3, 5), finish="white")
    assert ("island" not in check(room(0, 0, 6, 5), door, *walls)) == reached


def test_the_seed_says_which_floor_is_the_main_one(check):
    """Though the other is larger: 5.5 x 4.5 = 24.75 m2 of it are cut off."""
    finding = check(room(0, 0, 6, 5), room(7, 0, 10, 4), member={**WHITE, "seed": [8, 2]})["island"]
    assert finding.where[0] < 6


@pytest.mark.parametrize(
    "seed", [[20, 20], [0.1, 2], [3, 0]], ids=["outside", "too near a wall", "in a wall"]
)
def test_a_seed_where_no_robot_stands_is_an_error(check, seed):
    """Flooding from there would reach nothing, or all the world."""
    assert check(room(0, 0, 6, 5), member={**WHITE, "seed": seed})["seed"].severity == "error"


def test_a_gap_to_the_outside_is_a_leak(check):
    """1 m of the outer wall is missing; a second room stays whole."""
    leaky = line((2, 0), (0, 0), (0, 5), (6, 5), (6, 0), (3, 0), finish="white")
    assert check(leaky, room(7, 0, 10, 4))["leak"].severity == "warning"


def test_an_outer_door_is_no_leak(check):
    """Doors may stand open: that is what they are for."""
    walls = line((2, 0), (0, 0), (0, 5), (6, 5), (6, 0), (3, 0), finish="white")
    assert check(walls, line((2, 0), (3, 0), kind="door", finish="white")) == {}


def test_a_room_of_three_walls_has_no_floor(check):
    """Everything is outside."""
    assert check(line((0, 0), (0, 5), (6, 5), (6, 0), finish="white"))["no_free_space"].severity == "error"


def test_a_robot_larger_than_the_room_has_no_floor(check):
    """5 m are too narrow for a radius of 3 m."""
    assert "no_free_space" in check(room(0, 0, 6, 5), robot_radius_m=3)


@pytest.mark.parametrize("radius, found", [(0.25, False), (0.5, True)])
def test_a_door_narrower_than_the_robot_is_found(check, radius, found):
    """0.9 m against 0.5 and 1.0 m."""
    walls = line((2, 0), (0, 0), (0, 5), (6, 5), (6, 0), (2.9, 0), finish="white")
    door = line((2, 0), (2.9, 0), kind="door", finish="white")
    assert ("narrow_door" in check(walls, door, robot_radius_m=radius)) == found


@pytest.mark.parametrize("scale, found", [(0.4, True), (1, False), (150, False), (1000, True)])
def test_a_plan_of_an_odd_size_is_found(check, scale, found):
    """A room of 6 m drawn in kilometres or millimetres; a mall of 900 m may be."""
    assert ("scale" in check(room(0, 0, 6 * scale, 5 * scale))) == found


@pytest.mark.parametrize("width, found", [(0.5, True), (0.9, False), (2.4, False), (3, True)])
def test_doors_of_an_odd_size_are_found(check, width, found):
    """A plan half or thrice as large as the building still looks like one, but for its doors."""
    walls = line((2, 0), (0, 0), (0, 5), (6, 5), (6, 0), (2 + width, 0), finish="white")
    door = line((2, 0), (2 + width, 0), kind="door", finish="white")
    assert ("scale" in check(walls, door)) == found


def test_a_plan_without_finishes_is_for_depth_only(check):
    """The tool says so before it is asked."""
    assert "depth only" in check(line(*ROOM), member=MEMBER)["no_finishes"].message


def test_the_gravest_comes_first(tmp_path):
    """An error (seed), two warnings (a gap of 0.3 m and the island behind it), a note (no finishes)."""
    features = line(*ROOM), line((3, 0), (3, 4.7))
    plan = read_plan(save(tmp_path / "p.geojson", *features, member={**MEMBER, "seed": [9, 9]}))
    assert [finding.severity for finding in check_plan(plan)] == ["error", "warning", "warning", "note"]


def test_a_robot_without_size_is_refused(tmp_path):
    """Its floor would be every plane."""
    plan = read_plan(save(tmp_path / "p.geojson", line(*ROOM)))
    with pytest.raises(ConfigError, match="robot_radius_m"):
        check_plan(plan, robot_radius_m=0)


def test_a_real_floor_is_found_sound_but_for_what_it_lacks(shared_data):
    """WRLD (CC BY 4.0), floor 3: balconies behind windows are islands, two doors are ducts of 0.5 m."""
    plan = read_plan(shared_data / "plans" / "westport-house-floor-3.geojson")
    assert {finding.what for finding in check_plan(plan)} == {"island", "narrow_door", "no_finishes"}

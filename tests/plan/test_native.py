"""Reading native plans: what a good file means, and what a bad one is told."""

import numpy as np
import pytest
from shapely.geometry import Polygon

from learnfilter.core.errors import PlanError
from learnfilter.plan import read_plan
from learnfilter.plan.floorplan import DOOR, NO_FINISH, OPEN, SHUT, SOLID, UNKNOWN, WALL, WINDOW
from tests.plan.drawing import MEMBER, ROOM, line, save, shape


@pytest.fixture
def file(tmp_path):
    return tmp_path / "plan.geojson"


def test_lines_are_walls_unless_they_say_otherwise(file):
    """Kinds come in file order, one segment an edge."""
    plan = read_plan(
        save(
            file,
            line((0, 0), (4, 0), (4, 3)),
            line((4, 3), (3, 3), kind="door"),
            line((3, 3), (0, 3), kind="window"),
        )
    )
    assert plan.kind.tolist() == [WALL, WALL, DOOR, WINDOW]
    assert plan.segments.tolist() == [[0, 0, 4, 0], [4, 0, 4, 3], [4, 3, 3, 3], [3, 3, 0, 3]]
    assert plan.feature.tolist() == [0, 0, 1, 2]


@pytest.mark.parametrize(
    "word, state", [("open", OPEN), ("shut", SHUT), ("unknown", UNKNOWN), (None, UNKNOWN)]
)
def test_a_door_stands_as_it_says(file, word, state):
    """Without a state nobody knows."""
    properties = {"kind": "door"} | ({"state": word} if word else {})
    assert read_plan(save(file, line((0, 0), (1, 0), **properties))).state.tolist() == [state]


def test_a_polygon_is_solid_and_its_open_ring_is_closed(file):
    """Four corners make four edges and one closed outline."""
    plan = read_plan(save(file, shape("Polygon", [[[0, 0], [2, 0], [2, 1], [0, 1]]])))
    assert plan.kind.tolist() == [SOLID] * 4
    assert plan.solids[0].tolist() == [[0, 0], [2, 0], [2, 1], [0, 1], [0, 0]]


def test_a_hole_is_not_solid_and_its_edges_are_surfaces(file):
    """A 4 x 4 block with a 2 x 2 court: 12 m2 of it are solid, 8 edges can be seen."""
    court = [[1, 1], [3, 1], [3, 3], [1, 3], [1, 1]]
    plan = read_plan(save(file, shape("Polygon", [[[0, 0], [4, 0], [4, 4], [0, 4], [0, 0]], court])))
    assert len(plan.segments) == 8
    pieces = [Polygon(outline) for outline in plan.solids]
    assert sum(piece.area for piece in pieces) == pytest.approx(12, abs=1e-9)  # rounding alone
    assert not any(piece.contains(Polygon(court).centroid) for piece in pieces)


def test_unmapped_area_has_no_surfaces(file):
    """Only its outline is kept."""
    plan = read_plan(save(file, line(*ROOM), shape("Polygon", [ROOM], kind="unmapped")))
    assert len(plan.segments) == 4
    assert plan.unmapped[0].tolist() == ROOM


def test_edges_without_length_are_dropped(file):
    """A point drawn twice makes no wall."""
    assert len(read_plan(save(file, line((0, 0), (0, 0), (1, 0), (1, 0), (1, 1)))).segments) == 2


def test_collected_geometries_are_split(file):
    """Two lines in one feature stay two lines of that feature."""
    plan = read_plan(save(file, shape("MultiLineString", [[[0, 0], [1, 0]], [[5, 5], [6, 5]]])))
    assert plan.segments.tolist() == [[0, 0, 1, 0], [5, 5, 6, 5]]
    assert plan.feature.tolist() == [0, 0]


def test_members_reach_the_plan(file):
    """Name, finishes, origin and seed as written."""
    member = {
        **MEMBER,
        "name": "Hall",
        "finishes": {"moss": [0.1, 0.4, 0.2]},
        "origin": [7.5, 50.1],
        "seed": [1, 2],
    }
    plan = read_plan(save(file, line((0, 0), (4, 0), finish="moss"), line((4, 0), (4, 1)), member=member))
    assert (plan.name, plan.origin, plan.seed) == ("Hall", (7.5, 50.1), (1, 2))
    assert plan.finishes[0].srgb == (0.1, 0.4, 0.2)
    assert plan.finish.tolist() == [0, NO_FINISH]


BAD_FEATURES = {
    "a kind nobody knows": line((0, 0), (1, 0), kind="hedge"),
    "a door that is an area": shape("Polygon", [ROOM], kind="door"),
    "a state nobody knows": line((0, 0), (1, 0), kind="door", state="ajar"),
    "a finish the plan does not name": line((0, 0), (1, 0), finish="gold"),
    "edges that are no truth value": shape("Polygon", [ROOM], edges="no"),
    "a point": shape("Point", [0, 0]),
    "a collection": {"type": "Feature", "properties": {}, "geometry": {"type": "GeometryCollection"}},
    "no geometry": {"type": "Feature", "properties": {}, "geometry": None},
    "no coordinates": {"type": "Feature", "properties": {}, "geometry": {"type": "LineString"}},
    "one position": line((0, 0)),
    "one place twice": line((1, 1), (1, 1)),
    "a position of one number": line((0, 0), (1,)),
    "a position of words": line((0, 0), ("a", "b")),
    "a position of truth values": line((0, 0), (True, False)),
    "a position beyond all numbers": line((0, 0), (10**400, 0)),
    "a ring of two corners": shape("Polygon", [[[0, 0], [1, 0], [0, 0]]]),
    "no feature": {"type": "Plan"},
    "no object": [1, 2],
}


@pytest.mark.parametrize("feature", BAD_FEATURES.values(), ids=BAD_FEATURES.keys())
def test_a_bad_feature_is_named(file, feature):
    """The message leads to the file and the feature, counted from 0."""
    with pytest.raises(PlanError) as fault:
        read_plan(save(file, line(*ROOM), feature))
    assert fault.value.file == file
    assert fault.value.place == "feature 1"


def test_a_feature_with_an_id_is_named_by_it(file):
    """Ids are what drawing programs show."""
    with pytest.raises(PlanError, match=r"feature 0 \(id 103\)"):
        read_plan(save(file, line((0, 0), (1, 0), kind="hedge", id=103)))


BAD_MEMBERS = {
    "not an object": 1,
    "no schema": {"units": "m"},
    "a schema of no kind": {**MEMBER, "schema": True},
    "other units": {**MEMBER, "units": "mm"},
    "a name that is no text": {**MEMBER, "name": 3},
    "finishes in a list": {**MEMBER, "finishes": ["red"]},
    "a colour above 1": {**MEMBER, "finishes": {"red": [255, 0, 0]}},
    "a colour below 0": {**MEMBER, "finishes": {"red": [-0.1, 0, 0]}},
    "a colour of two numbers": {**MEMBER, "finishes": {"red": [0.5, 0.5]}},
    "a seed of words": {**MEMBER, "seed": ["a", "b"]},
    "an origin of one number": {**MEMBER, "origin": [7]},
}


@pytest.mark.parametrize("member", BAD_MEMBERS.values(), ids=BAD_MEMBERS.keys())
def test_a_bad_member_is_refused(file, member):
    """Before anything of the plan is used."""
    with pytest.raises(PlanError, match=r"plan\.geojson"):
        read_plan(save(file, line(*ROOM), member=member))


def test_a_newer_schema_is_refused_by_name(file):
    """So that nothing of a newer plan is silently lost."""
    with pytest.raises(PlanError, match=r"newer learnfilter.*schema <= 1, got 2"):
        read_plan(save(file, line(*ROOM), member={**MEMBER, "schema": 2}))


BAD_TEXTS = {
    "empty": b"",
    "not JSON": b'{"type": ',
    "not UTF-8": b'{"type": "\xff"}',
    "NaN": b'{"type": "FeatureCollection", "learnfilter": {"schema": NaN}, "features": []}',
    "a list": b"[]",
    "one feature alone": b'{"type": "Feature"}',
    "features in no list": b'{"type": "FeatureCollection", "features": {}}',
    "no walls": b'{"type": "FeatureCollection", "learnfilter": {"schema": 1, "units": "m"}, "features": []}',
    "nested beyond sense": b"[" * 100_000,
}


@pytest.mark.parametrize("text", BAD_TEXTS.values(), ids=BAD_TEXTS.keys())
def test_a_text_that_is_no_plan_is_refused(file, text):
    """Whatever it is, the message names the file."""
    file.write_bytes(text)
    with pytest.raises(PlanError, match=r"plan\.geojson"):
        read_plan(file)


@pytest.mark.parametrize("name", ["absent.geojson", "plan.xyz", "plan"])
def test_a_file_that_cannot_be_read_is_refused(tmp_path, name):
    """Absent, of an unknown suffix, of none."""
    with pytest.raises(PlanError, match=name):
        read_plan(tmp_path / name)


def test_an_unknown_option_is_refused_with_the_known_ones(file):
    """A misspelt option must not be ignored."""
    with pytest.raises(PlanError, match=r"expected level, .*got levle"):
        read_plan(save(file, line(*ROOM)), levle=1)


def test_a_bow_tie_is_two_triangles(file):
    """A ring that crosses itself at (1, 1) encloses two triangles of 1 m2 each (even-odd rule)."""
    plan = read_plan(save(file, shape("Polygon", [[[0, 0], [2, 2], [2, 0], [0, 2], [0, 0]]])))
    assert sorted(Polygon(outline).area for outline in plan.solids) == pytest.approx([1, 1])
    assert len(plan.segments) == 4
    assert np.isfinite(plan.segments).all()

"""Writing a plan and reading it gives the plan."""

import json

import numpy as np
import pytest

from learnfilter.core.seeds import stream
from learnfilter.plan import Finish, FloorPlan, read_plan, write_plan
from learnfilter.plan.floorplan import DOOR, SHUT, WALL
from tests.plan.drawing import MEMBER, ROOM, line, save, shape

HOLED = [[[0, 0], [4, 0], [4, 4], [0, 4], [0, 0]], [[1, 1], [3, 1], [3, 3], [1, 3], [1, 1]]]


def assert_same(plan: FloorPlan, expected: FloorPlan) -> None:
    """All but the feature numbers, which belong to a file."""
    for key in ("segments", "kind", "state", "finish"):
        np.testing.assert_array_equal(getattr(plan, key), getattr(expected, key), err_msg=key)
    for key in ("solids", "unmapped"):
        assert [o.tolist() for o in getattr(plan, key)] == [o.tolist() for o in getattr(expected, key)]
    for key in ("finishes", "seed", "origin", "name"):
        assert getattr(plan, key) == getattr(expected, key)


def some_plan(seed: int) -> FloorPlan:
    """Labels, runs and outlines of all sorts, some of which look joined and are not."""
    rng = stream(seed, "tests", "plan")
    n = 30
    points = rng.integers(0, 4, (n + 1, 2)) / 3  # few places, so that ends meet by chance
    kind = rng.integers(0, 4, n)
    segments = np.hstack([points[:-1], points[1:]])
    segments = segments[(points[:-1] != points[1:]).any(axis=1)]
    kind = kind[: len(segments)]
    square = segments[0, :2] + np.array([[0, 0], [1, 0], [1, 1], [0, 1], [0, 0]])
    return FloorPlan(
        segments=np.vstack([segments, np.hstack([square[:-1], square[1:]])]),
        kind=np.append(kind, [WALL] * 4),
        state=np.append(np.where(kind == DOOR, rng.integers(0, 3, len(kind)), SHUT), [SHUT] * 4),
        finish=np.append(rng.integers(-1, 2, len(kind)), [-1] * 4),
        feature=np.append(np.arange(len(kind)) // 3, [99] * 4),
        finishes=(Finish("teal", (0.1, 0.5, 1 / 3)), Finish("grün", (0.0, 1.0, 0.1))),
        solids=(square + 7, square, square + 1 / 7),
        unmapped=(square - 3,),
        seed=(1 / 3, 2.0),
        origin=(-2.97, 56.46),
        name="Küche 1",
    )


@pytest.mark.parametrize("seed", range(5))
def test_any_plan_comes_back_exactly(tmp_path, seed):
    """To the last bit: JSON numbers are written whole."""
    plan = some_plan(seed)
    write_plan(plan, tmp_path / "plan.geojson")
    assert_same(read_plan(tmp_path / "plan.geojson"), plan)


def test_a_projected_plan_keeps_its_frame(tmp_path):
    """The origin is stored, so a written plan stands where the degrees put it."""
    degrees = save(tmp_path / "a.geojson", line((7, 50), (7.001, 50.001), type="wall"), member=None)
    plan = read_plan(degrees)
    write_plan(plan, tmp_path / "a2.geojson")
    assert_same(read_plan(tmp_path / "a2.geojson"), plan)


def test_a_solid_thing_stays_one_feature(tmp_path):
    """A person can move a desk in the written file as in the first."""
    write_plan(read_plan(save(tmp_path / "a.geojson", shape("Polygon", [ROOM]))), tmp_path / "b.geojson")
    features = json.loads((tmp_path / "b.geojson").read_text())["features"]
    assert [feature["geometry"] for feature in features] == [{"type": "Polygon", "coordinates": [ROOM]}]


def test_a_solid_with_a_hole_comes_back(tmp_path):
    """Its pieces are written beside its edges."""
    plan = read_plan(
        save(tmp_path / "a.geojson", shape("Polygon", HOLED), line((9, 9), (8, 9)), member=MEMBER)
    )
    write_plan(plan, tmp_path / "a2.geojson")
    again = read_plan(tmp_path / "a2.geojson")
    assert again.content_hash() == plan.content_hash()


def test_a_failed_write_leaves_the_old_file(tmp_path):
    """NaN cannot be written, and what was there stays."""
    path = save(tmp_path / "plan.geojson", line(*ROOM))
    before = path.read_bytes()
    broken = FloorPlan(np.full((1, 4), np.nan), [WALL], [SHUT], [-1], [0])
    with pytest.raises(ValueError):
        write_plan(broken, path)
    assert path.read_bytes() == before


@pytest.mark.parametrize(
    "name, options",
    [("westport-house-floor-gf", {}), ("westport-house-floor-3", {}), ("osm-caserne", {"level": 0})],
)
def test_real_plans_come_back_exactly(tmp_path, shared_data, name, options):
    """Sources: WRLD (CC BY 4.0), OpenStreetMap contributors (ODbL 1.0)."""
    plan = read_plan(shared_data / "plans" / f"{name}.geojson", **options)
    write_plan(plan, tmp_path / "plan.geojson")
    assert_same(read_plan(tmp_path / "plan.geojson"), plan)

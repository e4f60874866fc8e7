"""Every toy world is what its README says."""

from pathlib import Path

import numpy as np
import pytest
from shapely.geometry import Polygon

from learnfilter.plan import FloorPlan, check_plan, read_plan
from learnfilter.plan.floorplan import DOOR, WINDOW

TOYS = Path(__file__).resolve().parents[2] / "toy_worlds"


def turned(plan: FloorPlan, about: tuple[float, float], quarters: int) -> set:
    """Segments with their finishes after quarter turns, direction and order left out."""
    points = plan.segments.reshape(-1, 2, 2) - about
    for _ in range(quarters):
        points = np.stack([-points[..., 1], points[..., 0]], axis=-1)
    ends = np.round(points + about, 9).tolist()
    return {
        (frozenset(map(tuple, pair)), int(finish)) for pair, finish in zip(ends, plan.finish, strict=True)
    }


def test_the_readme_lists_every_world():
    """And no other."""
    readme = (TOYS / "README.md").read_text(encoding="utf-8")
    files = sorted(path.name for path in TOYS.glob("*.geojson"))
    assert files == sorted(line.split("`")[1] for line in readme.splitlines() if line.startswith("| `"))


@pytest.mark.parametrize("path", sorted(TOYS.glob("*.geojson")), ids=lambda path: path.stem)
def test_a_toy_world_has_no_faults(path):
    """Nothing to mend, and finishes to see."""
    assert check_plan(read_plan(path)) == ()


@pytest.mark.parametrize(
    "name, middle, same",
    [
        ("square_room", (2, 2), {0, 1, 2, 3}),
        ("oblong_room", (2, 1.5), {0, 2}),
        ("square_room_red_wall", (2, 2), {0}),
    ],
)
def test_a_room_has_the_symmetry_it_is_kept_for(name, middle, same):
    """The turns that leave it as it was: as many as a pose has twins, itself counted."""
    plan = read_plan(TOYS / f"{name}.geojson")
    before = turned(plan, middle, 0)
    assert {quarters for quarters in range(4) if turned(plan, middle, quarters) == before} == same


def test_the_office_has_a_door_in_each_state_a_window_and_a_desk():
    """As the README says, 1.6 x 0.8 = 1.28 m2 of desk and 1 m2 of archive."""
    plan = read_plan(TOYS / "lindqvist_office.geojson")
    assert sorted(plan.state[plan.kind == DOOR].tolist()) == [0, 1, 2]
    assert (plan.kind == WINDOW).sum() == 1
    assert [Polygon(outline).area for outline in plan.solids] == pytest.approx([1.28])
    assert [Polygon(outline).area for outline in plan.unmapped] == pytest.approx([1.0])

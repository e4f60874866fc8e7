"""Invented sites keep the facts of buildings."""

from functools import cache

import numpy as np
import pytest
import shapely

from learnfilter.core.errors import ConfigError
from learnfilter.plan.floorplan import DOOR, KINDS, SHUT, SOLID
from learnfilter.sim import FAMILIES, make_plan

SIZES = [(8, 8), (12, 12), (12, 9.5), (20, 31.3), (40, 40)]
ROBOT_RADIUS_M = 0.25
# Walls of a public way are at least 44 in apart (IBC corridor-width table), doors 32 in wide (ADA 404.2.3).
CORRIDOR_M = 1.118
DOOR_M = 0.815
# Sums of whole decimetres over ten are exact to rounding.
EXACT_M = 1e-9


@cache
def plans(family):
    """Several sites of every size."""
    return [
        make_plan(family, np.random.default_rng([seed, int(width)]), width, depth)
        for width, depth in SIZES
        for seed in range(4)
    ]


def lengths(plan):
    """Length of every segment, metres."""
    return np.hypot(*(plan.segments[:, 2:] - plan.segments[:, :2]).T)


@pytest.mark.parametrize("family", FAMILIES)
def test_doors_are_wide_enough_for_people(family):
    """No door is narrower than the accessibility rule allows."""
    assert min(lengths(plan)[plan.kind == DOOR].min(initial=np.inf) for plan in plans(family)) >= DOOR_M


@pytest.mark.parametrize("family", FAMILIES)
def test_coordinates_are_whole_modules(family):
    """All coordinates are multiples of the basic module, 100 mm (ISO 21723:2019)."""
    for plan in plans(family):
        np.testing.assert_allclose(10 * plan.segments, np.rint(10 * plan.segments), atol=EXACT_M)


@pytest.mark.parametrize("family", FAMILIES)
def test_all_floor_is_one_piece_for_the_robot_when_doors_open(family):
    """Floor eroded by the robot's radius is connected once every door stands open."""
    for plan in plans(family):
        still = shapely.MultiLineString([s.reshape(2, 2) for s in plan.segments[plan.kind != DOOR]])
        solid = shapely.union_all([shapely.Polygon(o) for o in plan.solids])
        floor = shapely.box(*plan.bounds) - still.buffer(ROBOT_RADIUS_M) - solid
        parts = shapely.get_parts(floor)
        assert len(parts[shapely.area(parts) > 0.01]) == 1, plan.bounds


@pytest.mark.parametrize("family", FAMILIES)
def test_size_is_the_one_asked_for(family):
    """The plan fills the width and depth."""
    for (width, depth), plan in zip(np.repeat(SIZES, 4, axis=0), plans(family), strict=True):
        np.testing.assert_allclose(plan.bounds, (0, 0, width, depth), atol=EXACT_M)


def test_office_corridors_are_wide_enough():
    """Two walls with doors that face each other leave a public corridor between them."""
    for plan in plans("offices"):
        doors = plan.segments[(plan.kind == DOOR) & (plan.segments[:, 1] == plan.segments[:, 3])]
        assert np.diff(np.unique(doors[:, 1])).min(initial=np.inf) >= CORRIDOR_M


def test_aisles_are_wide_enough():
    """Racks stand together or leave an aisle between them."""
    for plan in plans("aisles"):
        racks = np.array([shapely.Polygon(outline) for outline in plan.solids])
        apart = shapely.distance(racks[:, None], racks)
        assert apart[apart > 0].min(initial=np.inf) >= CORRIDOR_M


def test_families_use_every_state_and_kind():
    """Over all families there are doors in each state, windows and solid things."""
    drawn = [plan for family in FAMILIES for plan in plans(family)]
    kinds = {int(kind) for plan in drawn for kind in plan.kind}
    states = {int(state) for plan in drawn for state in plan.state[plan.kind == DOOR]}
    assert (kinds, states) == (set(range(len(KINDS))), {0, 1, 2})


def test_most_doors_let_the_robot_pass():
    """Shut doors are few: less than a sixth of all."""
    states = np.concatenate([plan.state[plan.kind == DOOR] for plan in plans("offices")])
    assert 0 < np.mean(states == SHUT) < 1 / 6


@pytest.mark.parametrize("family", FAMILIES)
def test_a_palette_changes_colours_only(family):
    """The unseen palette leaves the layout as it is and shares no colour with the usual one."""
    usual, unseen = (make_plan(family, np.random.default_rng(3), palette=p) for p in ("usual", "unseen"))
    np.testing.assert_array_equal(usual.segments, unseen.segments)
    assert not {f.srgb for f in usual.finishes} & {f.srgb for f in unseen.finishes}


def test_without_finishes_the_plan_serves_depth_only():
    """The plan names no finish."""
    assert not make_plan("hall", np.random.default_rng(0), with_finishes=False).has_finishes


def test_a_few_finishes_cover_most_walls():
    """Three finishes are on more than two thirds of the length of walls of a site."""
    plan = make_plan("offices", np.random.default_rng(0), 40, 40)
    walls = plan.kind < SOLID
    covered = np.bincount(plan.finish[walls], lengths(plan)[walls])
    assert np.sort(covered)[-3:].sum() > 2 / 3 * covered.sum()


@pytest.mark.parametrize(
    ("family", "width", "palette"), [("castle", 12, "usual"), ("hall", 7, "usual"), ("hall", 12, "neon")]
)
def test_unusable_requests_are_refused(family, width, palette):
    """Unknown names and sizes out of range are the user's to mend."""
    with pytest.raises(ConfigError, match="expected"):
        make_plan(family, np.random.default_rng(0), width, 12, palette=palette)

"""Invented sites keep the facts of buildings."""

from collections import Counter
from functools import cache

import numpy as np
import pytest
import shapely

from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.plan.floorplan import DOOR, KINDS, SHUT, SOLID
from learnfilter.render import grid_for, render_site
from learnfilter.sim import FAMILIES, fold_of, make_plan

SIZES = [(8, 8), (12, 12), (12, 9.5), (18, 8), (20, 31.3), (40, 40)]
ROBOT_RADIUS_M = 0.25
# Walls of a public way are at least 44 in apart (IBC corridor-width table), doors 32 in wide (ADA 404.2.3).
CORRIDOR_M = 1.118
DOOR_M = 0.815
# Sums of whole decimetres over ten are exact to rounding.
EXACT_M = 1e-9
HEADINGS = 16
# 90 degrees in 16 columns; no bearing meets the lattice of corners at 45 degrees.
LAYOUT = lay_on_ring(Strip(even_strip(-42.1875, 5.625, 16)), HEADINGS, 4)


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


@pytest.mark.parametrize("family", ["offices", "doors", "wings"])
def test_corridors_are_wide_enough(family):
    """Two walls with doors that face each other leave a public corridor between them."""
    for plan in plans(family):
        doors = plan.segments[(plan.kind == DOOR) & (plan.segments[:, 1] == plan.segments[:, 3])]
        assert np.diff(np.unique(doors[:, 1])).min(initial=np.inf) >= CORRIDOR_M


@pytest.mark.parametrize("family", ["aisles", "racks"])
def test_aisles_are_wide_enough(family):
    """Racks stand together or leave an aisle between them."""
    for plan in plans(family):
        racks = np.array([shapely.Polygon(outline) for outline in plan.solids])
        apart = shapely.distance(racks[:, None], racks)
        assert apart[apart > 0].min(initial=np.inf) >= CORRIDOR_M


def test_pods_leave_a_way_between_them():
    """Walls of different pods are a public way apart."""
    for plan in plans("pods"):
        walls = shapely.linestrings(plan.segments.reshape(-1, 2, 2))
        inner = ~shapely.covered_by(walls, shapely.box(*plan.bounds).exterior.buffer(EXACT_M))
        lines = shapely.union_all(walls[inner])
        around = shapely.get_parts(lines.buffer(0.501))  # closes a doorway of a metre
        pods = np.array([lines.intersection(part).convex_hull for part in around])
        apart = shapely.distance(pods[:, None], pods)
        assert apart[~np.eye(len(pods), dtype=bool)].min() >= CORRIDOR_M


def test_racks_are_equal_and_their_aisles_too():
    """All racks of a site have one length and one width, all aisles between them one width."""
    for plan in plans("racks"):
        boxes = np.array([[*outline.min(axis=0), *outline.max(axis=0)] for outline in plan.solids])
        np.testing.assert_allclose(np.ptp(boxes[:, 2:] - boxes[:, :2], axis=0), 0, atol=EXACT_M)
        for axis in (0, 1):
            np.testing.assert_allclose(np.diff(np.unique(boxes[:, axis]), n=2), 0, atol=EXACT_M)


def test_all_rooms_behind_doors_but_two_are_equally_wide():
    """Rooms are the faces that all lines bound, without the one that is corridors and lobby."""
    for plan in plans("doors"):
        lines = shapely.union_all(shapely.linestrings(plan.segments.reshape(-1, 2, 2)))
        faces = np.array(shapely.get_parts(shapely.polygonize([lines])))
        left, _, right, _ = shapely.bounds(faces[shapely.area(faces).argsort()]).T
        width = (right - left)[:-1]
        assert np.count_nonzero(np.abs(width - np.median(width)) > EXACT_M) == 2


def test_doors_of_look_alike_rooms_are_equal():
    """One width and one state on a site."""
    for plan in plans("doors"):
        door = plan.kind == DOOR
        assert len(set(plan.state[door])) == 1
        np.testing.assert_allclose(lengths(plan)[door], lengths(plan)[door][0], atol=EXACT_M)


@pytest.mark.parametrize("family", FAMILIES)
def test_only_pods_have_slanted_walls(family):
    """Every plan of the family that stands for unseen ones has walls off the axes, no other plan has."""
    for plan in plans(family):
        along = plan.segments[:, 2:] - plan.segments[:, :2]
        assert (np.abs(along) > EXACT_M).all(axis=1).any() == (family == "pods")


def surfaces(plan, quarter_turns=0, finishes=True):
    """What stands where after turns about the middle: how often each line, whatever its direction."""
    left, bottom, right, top = plan.bounds
    x, y = np.rint(20 * plan.segments.reshape(-1, 2) - 10 * np.array([left + right, bottom + top])).T
    for _ in range(quarter_turns):
        x, y = -y, x
    ends = np.stack([x, y], axis=1).reshape(-1, 2, 2)
    looks = zip(plan.kind, plan.state, plan.finish if finishes else plan.kind, strict=True)
    lines = (frozenset(map(tuple, line)) for line in ends.tolist())
    return Counter(zip(lines, looks, strict=True))


@pytest.mark.parametrize("family", FAMILIES)
def test_a_plan_is_as_symmetric_as_its_family_says(family):
    """Turns by 2 pi / fold change nothing; finer turns change the geometry."""
    fold = fold_of(family)
    for plan in plans(family):
        assert surfaces(plan, 4 // fold) == surfaces(plan)
        for finer in {2, 4} - {fold}:
            assert surfaces(plan, 4 // finer, finishes=False) != surfaces(plan, finishes=False)


def test_solid_things_of_twin_wings_are_twins():
    """Turned by half a turn they cover the same floor; there are some."""
    for plan in plans("wings"):
        solid = shapely.union_all([shapely.Polygon(outline) for outline in plan.solids])
        turned = shapely.transform(solid, lambda xy, corner=plan.bounds[2:]: corner - xy)
        assert solid.area > 0
        assert solid.symmetric_difference(turned).area < EXACT_M


def site_of(family, seed):
    """Rings of a site of 12 x 12 m on cells of 0.25 m, a lattice that half a turn maps to itself."""
    plan = make_plan(family, np.random.default_rng(seed))
    return render_site(plan, LAYOUT, grid_for(plan, HEADINGS, 0.25), robot_radius_m=0.25, max_range_m=6.0)


@pytest.mark.parametrize("seed", range(3))
def test_twin_cells_of_twin_wings_see_the_same(seed):
    """Rings of cells that half a turn maps to each other are equal, rolled by half."""
    site = site_of("wings", seed)
    np.testing.assert_array_equal(site.live, site.live[::-1, ::-1])
    twins = [np.roll(a[::-1], LAYOUT.bearings // 2, axis=1) for a in (site.range_m, site.unsure, site.finish)]
    # float32 on top of rounded turns, which a wall met at 3 degrees makes twenty times larger
    np.testing.assert_allclose(site.range_m, twins[0], rtol=1e-6)
    np.testing.assert_array_equal(site.unsure, twins[1])
    np.testing.assert_array_equal(site.finish, twins[2])


def look_alikes(family, seed, n_poses=30):
    """[n_poses] for poses of a site: how many poses over 1 m off see much the same all around.

    Ranges beyond 6 m are taken for 6 m; the mean absolute difference is 0.2 m at most, since a look-alike
    place lies up to half a cell's diagonal, 0.18 m, off the next cell's centre.
    """
    site = site_of(family, seed)
    rings = np.minimum(site.range_m, 6.0)
    views = np.stack([np.roll(rings, -LAYOUT.bearings_per_heading * h, axis=1) for h in range(HEADINGS)])
    counts = []
    for cell in np.random.default_rng(seed).integers(site.n_cells, size=n_poses):
        alike = np.abs(views - rings[cell]).mean(axis=-1) <= 0.2
        far = np.hypot(*(site.cells - site.cells[cell]).T) * site.grid.cell_m > 1.0
        counts.append(np.count_nonzero(alike & far))
    return counts


@pytest.mark.parametrize(("harder", "usual"), [("doors", "offices"), ("racks", "aisles")])
def test_look_alike_families_deserve_the_name(harder, usual):
    """On 5 sites the median pose has more look-alikes than in the family that varies."""
    medians = [np.median([look_alikes(f, seed) for seed in range(5)]) for f in (harder, usual)]
    assert medians[0] > medians[1]


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


def test_symmetry_of_an_unknown_family_is_refused():
    """The message names the ones there are."""
    with pytest.raises(ConfigError, match="wings"):
        fold_of("castle")

"""The world of a day: how it differs from the plan, and in nothing else."""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from invented import EMPTY, NO_FAULTS, room, world_of

from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import Strip
from learnfilter.plan import read_plan
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, UNKNOWN, WALL, WINDOW
from learnfilter.render.live import grid_for, live_cells
from learnfilter.sim import Conditions, build_world, free_poses, make_plan, sense

N = 400
# Short lines, close together in a corner of a room: many draws from one world.
SHORT_LINES = [
    [0.05 * (i % 20), 0.05 * (i // 20), 0.05 * (i % 20) + 0.02, 0.05 * (i // 20)] for i in range(N)
]


def four_errors(share):
    """Four standard errors of a share of N draws."""
    return 4 * np.sqrt(share * (1 - share) / N)


def door_states(drawn, conditions):
    """Whether each of N doors, all drawn alike, is open in truth."""
    plan = room(6, 6, doors=[(line, drawn) for line in SHORT_LINES])
    return world_of(plan, conditions).truth.state[4:] == OPEN


@pytest.mark.parametrize(("drawn", "share"), [(OPEN, 1.0), (SHUT, 0.0), (UNKNOWN, 0.7)])
def test_unknown_doors_are_open_seven_times_in_ten(drawn, share):
    """Drawn open or shut they are as drawn."""
    assert abs(door_states(drawn, EMPTY).mean() - share) <= four_errors(share)


@pytest.mark.parametrize(("drawn", "share"), [(OPEN, 0.5), (SHUT, 0.0), (UNKNOWN, 0.35)])
def test_doors_are_shut_in_the_share_asked_for(drawn, share):
    """Half of those that would stand open are shut."""
    is_open = door_states(drawn, replace(EMPTY, doors_shut=0.5))
    assert abs(is_open.mean() - share) <= four_errors(share)


def test_walls_move_sideways_in_the_share_asked_for():
    """Each wall line stays or moves by exactly the distance, across itself."""
    plan = room(6, 6, extra=SHORT_LINES)
    truth = world_of(plan, replace(EMPTY, moved_walls=0.4, moved_by_m=0.3)).truth
    shift = (truth.segments - plan.segments)[:, :2]
    along = plan.segments[:, 2:] - plan.segments[:, :2]
    np.testing.assert_allclose(np.einsum("si,si->s", shift, along), 0, atol=1e-9)
    distance = np.hypot(*shift.T)
    assert np.isclose(distance, 0.3).sum() + np.isclose(distance, 0).sum() == distance.size
    assert abs((distance > 0.1).mean() - 0.4) < four_errors(0.4)


def test_walls_become_glass_in_the_share_asked_for():
    """Glass is what windows are."""
    kind = world_of(room(6, 6, extra=SHORT_LINES), replace(EMPTY, glass=0.3)).truth.kind
    assert set(np.unique(kind)) == {WALL, WINDOW}
    assert abs((kind == WINDOW).mean() - 0.3) < four_errors(0.3)


def test_a_plan_drawn_too_large_shows_in_truth_and_reference():
    """Truth is smaller by the factor; true poses read on the plan are where the plan shows them."""
    world = world_of(room(8, 4), replace(EMPTY, plan_scale=1.25))
    np.testing.assert_allclose(np.ptp(world.truth.segments.reshape(-1, 2), axis=0), [6.4, 3.2])
    # the true corner (0.8, 0.4) is the plan's corner (0, 0)
    np.testing.assert_allclose(world.on_plan(np.array([[0.8, 0.4, 1.0]])), [[0, 0, 1.0]], atol=1e-12)


def test_the_robot_is_given_the_plan_untouched():
    """Whatever the conditions, the plan is the one that came."""
    plan = make_plan("offices", np.random.default_rng(0))
    before = plan.content_hash()
    world = world_of(plan, Conditions(moved_walls=0.5, glass=0.5, doors_shut=0.5, plan_scale=1.1))
    assert world.plan is plan
    assert plan.content_hash() == before


def test_every_surface_has_a_colour_even_where_the_plan_names_none():
    """Truth knows finishes the plan does not."""
    world = world_of(room(8, 8, finished=False), Conditions())
    assert world.truth.finish.min() >= 0
    assert world.truth.finish.max() < len(world.truth.finishes)
    assert not world.plan.has_finishes


@pytest.mark.parametrize(
    "change", [{"light_level": 0.2}, {"missing_scale": 3.0}, {"glass": 0.5}, {"light_kelvin": 2700.0}]
)
def test_changing_one_condition_leaves_furniture_and_people_alone(change):
    """Streams are apart, so that conditions can be compared drive by drive."""
    plan = make_plan("hall", np.random.default_rng(0))
    usual, changed = (world_of(plan, c) for c in (Conditions(), replace(Conditions(), **change)))
    np.testing.assert_array_equal(usual.truth.segments, changed.truth.segments)
    np.testing.assert_array_equal(usual.people.ends, changed.people.ends)


def test_nothing_starts_behind_a_door_drawn_shut():
    """A closet the plan shuts is free floor, and not the robot's."""
    plan = room(6, 4, extra=[[4, 0, 4, 1], [4, 2, 4, 4]], doors=[([4, 1, 4, 2], SHUT)])
    assert free_poses(world_of(plan), np.random.default_rng(0), 100)[:, 0].max() < 4


def test_area_the_plan_does_not_know_is_solid():
    """A square of unmapped area: nobody starts within the robot's radius of it, and rays end there."""
    square = np.array([[2.0, 1.0], [4, 1], [4, 3], [2, 3]])
    world = world_of(replace(room(6, 4), unmapped=(square,)))
    places = shapely.points(free_poses(world, np.random.default_rng(0), 200)[:, :2])
    assert shapely.distance(shapely.Polygon(square), places).min() >= 0.25 - 1e-9
    strip = Strip((0.0,), 0.1, 8.0)
    depth, _ = sense(world, np.array([[1.0, 2, 0]]), np.zeros(1), strip, np.random.default_rng(0), NO_FAULTS)
    np.testing.assert_allclose(depth, [[1.0]], atol=1e-5)  # float32


def test_starts_lie_on_live_floor():
    """Free poses are in cells that render holds live, or at their rim."""
    plan = make_plan("offices", np.random.default_rng(4))
    grid = grid_for(plan, 1, 0.1)
    live = live_cells(plan, grid, 0.25)
    row, column = grid.cell_of(*free_poses(world_of(plan), np.random.default_rng(0), 300)[:, :2].T)
    around = [live[row + dr, column + dc] for dr in (-1, 0, 1) for dc in (-1, 0, 1)]
    assert np.any(around, axis=0).all()


def test_real_plans_become_worlds(shared_data):
    """A surveyed floor without finishes, with unmapped stairs, has floor to start on and colours."""
    plan = read_plan(shared_data / "plans" / "westport-house-floor-gf.geojson")
    world = build_world(plan, np.random.default_rng(0))
    assert world.start.sum() * 0.01 > 100  # square metres
    assert world.truth.finish.min() >= 0


@pytest.mark.parametrize(
    "wrong", [{"glass": 1.5}, {"people": -1}, {"finishes": "neon"}, {"plan_scale": 0}, {"light_kelvin": 100}]
)
def test_conditions_out_of_range_are_refused_by_key(wrong):
    """The message names the setting."""
    with pytest.raises(ConfigError, match=f"condition.{next(iter(wrong))}"):
        Conditions(**wrong)


def test_only_doors_are_ever_open():
    """Every other kind is what it is."""
    truth = world_of(make_plan("partitions", np.random.default_rng(0)), Conditions()).truth
    assert (truth.state[truth.kind != DOOR] == SHUT).all()
    assert not (truth.state == UNKNOWN).any()

"""Drives keep clear, start anywhere alike and get about."""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from invented import EMPTY, room, world_of
from scipy import stats

from learnfilter.core.errors import PlanError
from learnfilter.core.poses import between
from learnfilter.plan.floorplan import DOOR, OPEN
from learnfilter.sim import FAMILIES, Conditions, explore, free_poses, make_plan

RADIUS_M = 0.25


@pytest.mark.parametrize("family", FAMILIES)
def test_the_robot_touches_nothing(family):
    """The way between poses keeps the radius from walls, furniture and people's places at the start."""
    for seed in range(4):
        world = world_of(make_plan(family, np.random.default_rng(seed)), Conditions(10.0, 3), seed)
        truth = world.truth
        walls = truth.segments[(truth.kind != DOOR) | (truth.state != OPEN)].reshape(-1, 2, 2)
        people = shapely.points(world.people.at(np.zeros(1))[0])
        poses, _ = explore(world, np.random.default_rng(seed), 60)
        way = shapely.LineString(poses[:, :2])
        assert way.distance(shapely.MultiLineString(list(walls))) >= RADIUS_M - 1e-9
        assert shapely.distance(way, people).min(initial=np.inf) >= RADIUS_M + 0.25 - 1e-9


@pytest.mark.parametrize("family", FAMILIES)
def test_the_robot_gets_about(family):
    """Forty rows of steps of 0.2 to 0.5 m with turns between lead through several metres."""
    travelled = []
    for seed in range(6):
        world = world_of(make_plan(family, np.random.default_rng(seed)), Conditions(), seed)
        poses, _ = explore(world, np.random.default_rng(seed), 40)
        travelled.append(np.hypot(*np.diff(poses[:, :2], axis=0).T).sum())
    assert np.median(travelled) > 6


def test_the_robot_passes_narrow_doors():
    """Two furnished rooms, a gap of 0.9 m: every drive sees both."""
    plan = room(6, 4, extra=[[3, 0, 3, 1.5], [3, 2.4, 3, 4]], doors=[([3, 1.5, 3, 2.4], OPEN)])
    world = world_of(plan, Conditions(furniture_per_100_m2=8, people=0))
    for seed in range(5):
        x = explore(world, np.random.default_rng(seed), 120)[0][:, 0]
        assert x.min() < 2.5
        assert x.max() > 3.5


def test_motions_are_steps_and_turns_of_bounded_size():
    """No row moves farther or turns more than asked; time runs on."""
    world = world_of(make_plan("hall", np.random.default_rng(0)))
    poses, time_s = explore(world, np.random.default_rng(0), 80, step_m=(0.1, 0.3), turn_rad=0.4)
    motion = between(poses[:-1], poses[1:])
    assert np.hypot(motion[:, 0], motion[:, 1]).max() <= 0.3 + 1e-9
    assert np.abs(motion[:, 2]).max() <= 0.4 + 1e-9
    assert np.diff(time_s).min() > 0


def test_places_are_uniform_over_the_floor():
    """In an empty room x, y and heading are uniform and the corners are not left out."""
    poses = free_poses(world_of(room(5, 4)), np.random.default_rng(0), 1500)
    for values, low, high in zip(poses.T, (0.25, 0.25, -np.pi), (4.75, 3.75, np.pi), strict=True):
        assert stats.kstest(values, stats.uniform(low, high - low).cdf).pvalue > 1e-3
    within_a_cell = 10 * poses[:, :2] % 1  # nothing prefers the lattice's nodes, 0.1 m apart
    assert stats.kstest(within_a_cell.ravel(), "uniform").pvalue > 1e-3


def test_a_drive_starts_where_a_free_pose_may_be():
    """The first pose of a drive is a draw of `free_poses`."""
    world = world_of(room(5, 4))
    start = explore(world, np.random.default_rng(7), 3)[0][0]
    np.testing.assert_array_equal(start, free_poses(world, np.random.default_rng(7), 1)[0])


def test_a_site_without_room_is_refused_by_name():
    """Where no place is left the plan is named."""
    world = world_of(room(5, 4))
    full = replace(world, start=np.zeros_like(world.start))
    with pytest.raises(PlanError, match="nowhere is room for the robot"):
        explore(full, np.random.default_rng(0), 5)


def test_without_furniture_and_people_only_walls_are_in_the_way():
    """The obstacles of an empty room are its walls."""
    plan = room(5, 4)
    np.testing.assert_array_equal(world_of(plan, EMPTY).obstacles, plan.segments)

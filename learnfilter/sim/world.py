"""A site as it is on the day of a drive, beside the plan the robot is given."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.plan.floorplan import DOOR, NO_FINISH, OPEN, SHUT, SOLID, UNKNOWN, WALL, WINDOW, FloorPlan
from learnfilter.render.live import grid_for, live_cells
from learnfilter.sim.clutter import People, draw_people, furnish, outline_edges
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.finishes import FURNITURE, PALETTES
from learnfilter.sim.free import CELL_M, FreeSpace, free_space
from learnfilter.sim.light import Light, draw_light

ROBOT_RADIUS_M = 0.25
UNKNOWN_OPEN_SHARE = 0.7
# Where the plan names no finish, surfaces take these many of the palette's first ones.
N_FILL = 8


@dataclass(frozen=True, eq=False)
class World:
    """What the robot is told, and what is there.

    Attributes:
        plan: what the robot is given.
        truth: what stands there: doors open or shut only, furniture as solids, every finish known.
        conditions: how the two differ.
        light: of the day.
        people: who walks about.
        robot_radius_m: of the robot that drives there.
        obstacles: [n 4] segments the robot must not touch, round people as they stand at time 0 too.
        floor: where its centre can be among them.
        start: [rows columns] of `floor`, nodes on the plan's own live floor, where drives may start.
    """

    plan: FloorPlan
    truth: FloorPlan
    conditions: Conditions
    light: Light
    people: People
    robot_radius_m: float
    obstacles: NDArray[np.float64]
    floor: FreeSpace
    start: NDArray[np.bool_]

    def on_plan(self, poses: NDArray[np.float64]) -> NDArray[np.float64]:
        """True poses [t 3] as they read on the plan, which may be drawn at the wrong scale."""
        return np.column_stack([_scale(self.plan, poses[:, :2], self.conditions.plan_scale), poses[:, 2]])


def barriers(plan: FloorPlan) -> NDArray[np.float64]:
    """[n 4] segments that stop a robot: all but open and unknown doors."""
    return np.ascontiguousarray(plan.segments[(plan.kind != DOOR) | (plan.state == SHUT)])


def build_world(
    plan: FloorPlan,
    rng: np.random.Generator,
    conditions: Conditions | None = None,
    *,
    robot_radius_m: float = ROBOT_RADIUS_M,
) -> World:
    """Put a plan into the world of one drive: doors, finishes, furniture, light, people.

    Each of those draws from a stream of its own, so that changing one condition leaves the rest alone.

    Args:
        plan: any plan; surfaces whose finish it does not name get one all the same.
        rng: draws the world.
        conditions: 'as trained' if None.
        robot_radius_m: of the robot that will drive there.

    Raises:
        PlanError: from the flooding, where the plan has no floor.
    """
    conditions = conditions or Conditions()
    doors, walls, finishes, things, light, people = rng.spawn(6)
    shrink = 1 / conditions.plan_scale
    truth = replace(
        plan,
        segments=_scale(plan, plan.segments.reshape(-1, 2), shrink).reshape(-1, 4),
        state=_door_states(plan, conditions, doors),
        solids=tuple(_scale(plan, outline, shrink) for outline in plan.solids),
        unmapped=tuple(_scale(plan, outline, shrink) for outline in plan.unmapped),
    )
    truth = _wall_off_unmapped(truth)
    truth = _paint(_change_walls(truth, conditions, walls), conditions, finishes)
    bounds = truth.bounds
    empty = free_space(barriers(truth), truth.solids, bounds, robot_radius_m)
    live = _live_nodes(plan, empty, conditions.plan_scale, robot_radius_m)
    places = empty.place(*np.nonzero(empty.free & live))
    truth = _furnished(truth, places, conditions, things)
    walkers = draw_people(conditions.people, places, barriers(truth), people)
    rims = walkers.rims(0.0)
    obstacles = np.vstack([barriers(truth), *map(outline_edges, rims)])
    floor = free_space(obstacles, (*truth.solids, *rims), bounds, robot_radius_m)
    return World(
        plan,
        truth,
        conditions,
        draw_light(conditions, light),
        walkers,
        robot_radius_m,
        obstacles,
        floor,
        start=floor.free & live,
    )


def _scale(plan: FloorPlan, points: NDArray[np.float64], factor: float) -> NDArray[np.float64]:
    """Points [n 2] moved away from the middle of the plan."""
    left, bottom, right, top = plan.bounds
    middle = np.array([left + right, bottom + top]) / 2
    return middle + factor * (points - middle)


@lru_cache(maxsize=8)  # every day on a plan asks for the same floor, and flooding a large one is slow
def _live_floor(plan: FloorPlan, radius_m: float) -> tuple[PoseGrid, NDArray[np.bool_]]:
    grid = grid_for(plan, 1, CELL_M)
    return grid, live_cells(plan, grid, radius_m)


def _live_nodes(plan: FloorPlan, space: FreeSpace, plan_scale: float, radius_m: float) -> NDArray[np.bool_]:
    """[rows columns] nodes that lie on the plan's live floor, which is where a filter looks."""
    grid, live = _live_floor(plan, radius_m)
    nodes = space.place(*np.indices(space.cost.shape))
    x, y = np.moveaxis(_scale(plan, nodes.reshape(-1, 2), plan_scale).reshape(nodes.shape), -1, 0)
    row, column = grid.cell_of(x, y)
    return live[np.clip(row, 0, grid.rows - 1), np.clip(column, 0, grid.columns - 1)]


def _door_states(plan: FloorPlan, conditions: Conditions, rng: np.random.Generator) -> NDArray[np.int8]:
    """Doors drawn unknown stand open or shut; a share of all that are not drawn shut is shut."""
    is_open, is_shut = rng.random(len(plan.kind)), rng.random(len(plan.kind))
    state = np.where((plan.state == UNKNOWN) & (is_open >= UNKNOWN_OPEN_SHARE), SHUT, OPEN)
    state = np.where(is_shut < conditions.doors_shut, SHUT, state)
    return np.where((plan.kind == DOOR) & (plan.state != SHUT), state, SHUT).astype(np.int8)


def _change_walls(truth: FloorPlan, conditions: Conditions, rng: np.random.Generator) -> FloorPlan:
    """Move some wall lines sideways and make some of glass."""
    is_wall = truth.kind == WALL
    moved = is_wall & (rng.random(len(is_wall)) < conditions.moved_walls)
    side = np.where(rng.random(len(is_wall)) < 0.5, -1.0, 1.0)
    glass = is_wall & (rng.random(len(is_wall)) < conditions.glass)
    along = truth.segments[:, 2:] - truth.segments[:, :2]
    length = np.maximum(np.linalg.norm(along, axis=1, keepdims=True), 1e-12)
    normal = np.stack([-along[:, 1], along[:, 0]], axis=1) / length
    shift = (moved * side * conditions.moved_by_m)[:, None] * normal
    return replace(
        truth,
        segments=truth.segments + np.hstack([shift, shift]),
        kind=np.where(glass, WINDOW, truth.kind),
    )


def _paint(truth: FloorPlan, conditions: Conditions, rng: np.random.Generator) -> FloorPlan:
    """Give every surface without a finish one; surfaces of one feature look alike."""
    palette = PALETTES[conditions.finishes][:N_FILL]
    chosen = rng.integers(N_FILL, size=int(truth.feature.max(initial=0)) + 1)
    filled = np.where(truth.finish == NO_FINISH, len(truth.finishes) + chosen[truth.feature], truth.finish)
    return replace(truth, finish=filled, finishes=truth.finishes + palette)


def _furnished(
    truth: FloorPlan, places: NDArray[np.float64], conditions: Conditions, rng: np.random.Generator
) -> FloorPlan:
    """Add things the plan does not show, on lattice places [k 2] of its live floor."""
    mean_count = conditions.furniture_per_100_m2 * len(places) * CELL_M**2 / 100
    doorways = np.ascontiguousarray(truth.segments[truth.kind == DOOR])
    outlines, finishes = furnish(places, barriers(truth), doorways, mean_count, rng)
    painted = replace(truth, finishes=truth.finishes + FURNITURE)
    return _with_solids(painted, outlines, len(truth.finishes) + finishes)


def _with_solids(
    truth: FloorPlan, outlines: Sequence[NDArray[np.float64]], finish: NDArray[np.int64]
) -> FloorPlan:
    """Add closed outlines, each a feature of its own with a finish [k]."""
    sides = [len(outline) for outline in outlines]
    feature = truth.feature.max(initial=-1) + 1 + np.arange(len(sides))
    return replace(
        truth,
        segments=np.vstack([truth.segments, *map(outline_edges, outlines)]),
        kind=np.append(truth.kind, np.full(sum(sides), SOLID)),
        state=np.append(truth.state, np.full(sum(sides), SHUT)),
        finish=np.append(truth.finish, np.repeat(finish, sides)),
        feature=np.append(truth.feature, np.repeat(feature, sides)),
        solids=(*truth.solids, *outlines),
    )


def _wall_off_unmapped(truth: FloorPlan) -> FloorPlan:
    """Area the plan does not know is taken for solid: something stands there, and nobody drives in."""
    outlines = truth.unmapped
    return replace(_with_solids(truth, outlines, np.full(len(outlines), NO_FINISH)), unmapped=())

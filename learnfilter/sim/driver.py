"""Drive about a furnished site the way a robot explores.

The first pose is uniform over headings and over the robot's floor: places on the plan's live floor
clear of things by its radius, less a fringe of a few centimetres, in parts of at least SMALLEST_M2
where there is one.  Later poses follow the ways between goals, so they favour the middles of
passages: who needs places drawn alike takes `free_poses`.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from learnfilter.core.errors import PlanError
from learnfilter.core.poses import wrap
from learnfilter.sim.free import CELL_M, clearance, way_lengths
from learnfilter.sim.world import World

SMALLEST_M2 = 1.0
SPEED_M_PER_S = 0.6
TURN_RATE_RAD_PER_S = 1.0
PAUSE_S = 0.2
LOOK_AHEAD_M = 0.9
# Shorter arcs are not tried, unless the next point of the way is as near as that.
SHORTEST_STEP_M = 0.05
ARRIVED_M = 0.4
SEEN_M = 1.5
# How much less a place seen before attracts.
SEEN_WEIGHT = 0.05
LOOK_ROUND_SHARE = 0.06


def free_poses(world: World, rng: np.random.Generator, count: int) -> NDArray[np.float64]:
    """Independent poses [count 3], uniform over the floor and over headings.

    Raises:
        PlanError: nowhere is room for the robot.
    """
    floor = world.floor
    parts = floor.components()
    sizes = np.bincount(parts[world.start], minlength=parts.max() + 1)
    roomy = world.start & (sizes[parts] * CELL_M**2 >= SMALLEST_M2)
    nodes = floor.place(*np.nonzero(roomy if roomy.any() else world.start))
    poses: list[tuple[float, float, float]] = []
    for _ in range(1000 * count if len(nodes) else 0):
        x, y = nodes[rng.integers(len(nodes))] + rng.uniform(-CELL_M / 2, CELL_M / 2, 2)
        if clearance(x, y, x, y, world.obstacles) >= world.robot_radius_m:
            poses.append((x, y, rng.uniform(-np.pi, np.pi)))
        if len(poses) == count:
            return np.array(poses)
    raise PlanError("nowhere is room for the robot", place=world.plan.name, expected="free floor")


def explore(
    world: World,
    rng: np.random.Generator,
    rows: int,
    *,
    step_m: tuple[float, float] = (0.2, 0.5),
    turn_rad: float = 0.5,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Drive towards far places not seen yet, along arcs, turning on the spot where an arc would touch.

    The robot keeps its radius from everything, people as they stand at time 0 included.

    Args:
        world: where.
        rng: draws start, goals and steps.
        rows: poses wanted.
        step_m: shortest and longest usual step; near things steps get shorter.
        turn_rad: most the heading changes from row to row.

    Returns:
        poses [t 3] of the robot and time_s [t], from 0.

    Raises:
        PlanError: nowhere is room for the robot.
    """
    obstacles, radius, floor = world.obstacles, world.robot_radius_m, world.floor
    pose = free_poses(world, rng, 1)[0]
    goals = _Goals(world, pose, rng)
    poses, time_s = np.empty((rows, 3)), np.zeros(rows)
    for row in range(rows):
        poses[row] = pose
        goals.visit(pose)
        turned = rng.uniform(-turn_rad, turn_rad)
        step = rng.uniform(*step_m)
        if rng.random() < LOOK_ROUND_SHARE:
            after = np.array([pose[0], pose[1], wrap(pose[2] + turned)])
        else:
            x, y = _look_ahead(pose, goals.lengths, floor.left_m, floor.bottom_m, obstacles, radius)
            after, moved = _advance(pose, x, y, step, turn_rad, obstacles, radius)
            if not moved:
                goals.choose(pose)
                after[2] = wrap(pose[2] + turned)
        travel, turn = np.hypot(*(after[:2] - pose[:2])), abs(wrap(after[2] - pose[2]))
        if row + 1 < rows:
            time_s[row + 1] = time_s[row] + PAUSE_S + travel / SPEED_M_PER_S + turn / TURN_RATE_RAD_PER_S
        pose = after
    return poses, time_s


class _Goals:
    """Where to go next: far, and not seen before.

    Attributes:
        lengths: [rows columns] of the ways to the present goal.
    """

    def __init__(self, world: World, pose: NDArray[np.float64], rng: np.random.Generator):
        self._floor, self._rng = world.floor, rng
        parts = self._floor.components()
        part = parts[self._floor.node(*pose[:2])]
        self._row, self._column = np.nonzero(parts == part)
        self._x, self._y = self._floor.place(self._row, self._column).T.copy()
        self._seen = np.zeros(len(self._x), bool)
        self.choose(pose)

    def choose(self, pose: NDArray[np.float64]) -> None:
        """Draw a goal; the chance grows with its distance and falls where it was seen."""
        far = np.sqrt(self._squared_distance(pose)) + 1e-3
        weight = np.cumsum(far * np.where(self._seen, SEEN_WEIGHT, 1.0))
        chosen = np.searchsorted(weight, self._rng.random() * weight[-1])
        self._goal = np.array([self._x[chosen], self._y[chosen]])
        self.lengths = way_lengths(self._floor.cost, self._row[chosen], self._column[chosen])

    def visit(self, pose: NDArray[np.float64]) -> None:
        """Note what is near as seen; take a new goal where this one is reached."""
        self._seen |= self._squared_distance(pose) < SEEN_M**2
        if np.hypot(*(self._goal - pose[:2])) < ARRIVED_M:
            self.choose(pose)

    def _squared_distance(self, pose: NDArray[np.float64]) -> NDArray[np.float64]:
        return (self._x - pose[0]) ** 2 + (self._y - pose[1]) ** 2


@njit(cache=True)
def _look_ahead(pose, lengths, left, bottom, obstacles, radius):
    """Farthest point down the way to the goal that the robot can reach in a straight line, or where it is."""
    rows, columns = lengths.shape
    row, column = round((pose[1] - bottom) / CELL_M), round((pose[0] - left) / CELL_M)
    target_x, target_y = pose[0], pose[1]
    travelled = 0.0
    while travelled < LOOK_AHEAD_M:
        best_row, best_column = row, column
        for r in range(max(row - 1, 0), min(row + 2, rows)):
            for c in range(max(column - 1, 0), min(column + 2, columns)):
                if lengths[r, c] < lengths[best_row, best_column]:
                    best_row, best_column = r, c
        if best_row == row and best_column == column:
            break
        row, column = best_row, best_column
        travelled += CELL_M
        x, y = left + CELL_M * column, bottom + CELL_M * row
        if clearance(pose[0], pose[1], x, y, obstacles) >= radius:
            target_x, target_y = x, y
    return target_x, target_y


@njit(cache=True)
def _advance(pose, x, y, step, most_turn, obstacles, radius):
    """One motion towards a point: an arc if it is ahead and the arc is clear, else a turn on the spot.

    Returns the pose after and whether the robot did anything.
    """
    after = pose.copy()
    dx, dy = x - pose[0], y - pose[1]
    distance = np.hypot(dx, dy)
    if distance == 0.0:
        return after, False
    bearing = (np.arctan2(dy, dx) - pose[2] + np.pi) % (2 * np.pi) - np.pi
    curvature = 2 * np.sin(bearing) / distance
    length = min(step, distance)
    if abs(bearing) < np.pi / 4:
        shortest = min(SHORTEST_STEP_M, distance / 2)
        while length > shortest:
            turn = length * curvature
            if abs(turn) <= most_turn:
                # the arc bulges from its chord by the sagitta
                chord = length if abs(turn) < 1e-9 else 2 * np.sin(turn / 2) / curvature
                bulge = chord / 2 * abs(np.tan(turn / 4))
                after[0] = pose[0] + chord * np.cos(pose[2] + turn / 2)
                after[1] = pose[1] + chord * np.sin(pose[2] + turn / 2)
                if clearance(pose[0], pose[1], after[0], after[1], obstacles) >= radius + bulge:
                    after[2] = (pose[2] + turn + np.pi) % (2 * np.pi) - np.pi
                    return after, True
            length *= 0.6
        after[:2] = pose[:2]
    if abs(bearing) < 0.02:
        return after, False
    turn = min(max(bearing, -most_turn), most_turn)
    after[2] = (pose[2] + turn + np.pi) % (2 * np.pi) - np.pi
    return after, True

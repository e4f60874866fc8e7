"""Walls from rooms that share them, and openings where a door is only a point.

On an indoor-tagged map a room is a polygon whose outline stands for its walls, so a wall between two
rooms comes twice.  Corridors flow into each other and into open areas: an edge they share is no wall.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from learnfilter.plan.builder import PlanBuilder
from learnfilter.plan.floorplan import DOOR, WALL

# Corners nearer than this are one corner: maps carry 7 decimals of a degree, which is 1 cm.
SAME_CORNER_M = 0.01
# A door farther than this from every wall belongs to a wall the map does not show.
DOOR_TO_WALL_M = 0.3
# Half width of the strip a door clears: straight walls on maps bend by their rounding.
CLEARED_M = 0.05

_Corners = tuple[tuple[float, ...], tuple[float, ...]]


@dataclass(frozen=True)
class DoorPoint:
    """Where ([2] metres) a door is, its state, and the feature it came from."""

    xy: NDArray[np.float64]
    state: int
    feature: int


class RoomEdges:
    """Collects outlines and doors of one level, then hands their walls to a builder."""

    def __init__(self) -> None:
        self._edges: dict[_Corners, tuple[NDArray[np.float64], int]] = {}
        self._roles: dict[_Corners, list[str]] = {}
        self._doors: list[DoorPoint] = []

    def outline(self, role: str, xy: NDArray[np.float64], feature: int) -> None:
        """Add the edges of a polyline ([k 2] metres); role is room, corridor or area."""
        for start, end in pairwise(xy):
            a, b = (tuple(np.rint(point / SAME_CORNER_M).tolist()) for point in (start, end))
            if a != b:
                key = (min(a, b), max(a, b))
                self._edges.setdefault(key, (np.concatenate([start, end]), feature))
                self._roles.setdefault(key, []).append(role)

    def door(self, door: DoorPoint) -> None:
        """Add a door; it is placed when all walls are known."""
        self._doors.append(door)

    def build(self, builder: PlanBuilder, door_width_m: float) -> None:
        """Hand over walls with openings cut, and a door in each opening."""
        walls = [(row, feature) for key, (row, feature) in self._edges.items() if _is_wall(self._roles[key])]
        if not walls:
            return
        rows = np.array([row for row, _ in walls])
        features = np.array([feature for _, feature in walls])
        for door in self._doors:
            span = door_span(rows, door.xy, door_width_m)
            if span is not None:
                rows, features = clear_span(rows, features, span)
                builder.line(span, DOOR, door.feature, door.state)
        for row, feature in zip(rows, features, strict=True):
            builder.line(row.reshape(2, 2), WALL, int(feature))


def _is_wall(roles: list[str]) -> bool:
    return "room" in roles or roles == ["corridor"]


def door_span(
    rows: NDArray[np.float64], xy: NDArray[np.float64], width_m: float
) -> NDArray[np.float64] | None:
    """Where a door of that width stands: along a wall at the point, over as much wall as it can.

    Args:
        rows: [n 4] walls, x0 y0 x1 y1 in metres.
        xy: [2] the door's point.
        width_m: of the opening.

    Returns:
        [2 2] its ends; None where no wall is near.
    """
    start, along = rows[:, :2], rows[:, 2:] - rows[:, :2]
    share = np.clip(((xy - start) * along).sum(axis=1) / (along**2).sum(axis=1), 0, 1)
    feet = start + share[:, None] * along
    near = np.flatnonzero(np.hypot(*(feet - xy).T) <= DOOR_TO_WALL_M)
    best, most = None, 0.0
    for i in near:
        step = along[i] / np.hypot(*along[i]) * width_m
        for shift in (0.0, 0.5, -0.5):  # at a corner the door stands beside it, not across
            span = feet[i] + np.outer([shift - 0.5, shift + 0.5], step)
            low, high = overlap(rows, span)
            covered = np.maximum(high - low, 0).sum()
            if covered > most + CLEARED_M:
                best, most = span, covered
    return best


def overlap(
    rows: NDArray[np.float64], span: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """From where to where, in metres along the span, each wall lies on it; low >= high where it does not.

    A wall lies on the span where it is within CLEARED_M of the span's line and nearly parallel.
    """
    width = np.hypot(*(span[1] - span[0]))
    along = (span[1] - span[0]) / width
    across = np.array([-along[1], along[0]])
    ends = rows.reshape(-1, 2, 2) - span[0]
    place, off = ends @ along, np.abs(ends @ across)
    order = np.sort(np.clip(place, 0, width), axis=1)
    length = np.hypot(*(rows[:, 2:] - rows[:, :2]).T)
    parallel = np.abs(place[:, 1] - place[:, 0]) > 0.98 * length  # within 11 degrees
    lies = parallel & (off.min(axis=1) <= CLEARED_M)
    return np.where(lies, order[:, 0], 0.0), np.where(lies, order[:, 1], 0.0)


def clear_span(
    rows: NDArray[np.float64], features: NDArray[np.int64], span: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Cut a door's span out of the walls ([n 4], with [n] features); what remains keeps its feature."""
    low, high = overlap(rows, span)
    hit = high > low
    width = np.hypot(*(span[1] - span[0]))
    along = (span[1] - span[0]) / width
    pieces, owners = [], []
    for row, owner in zip(rows[hit], features[hit], strict=True):
        for end in row.reshape(2, 2):
            place = (end - span[0]) @ along
            if place < -SAME_CORNER_M or place > width + SAME_CORNER_M:
                # ends on the door itself, so that no crack is left beside it
                pieces.append([*end, *span[0 if place < 0 else 1]])
                owners.append(owner)
    left = np.array(pieces).reshape(-1, 4)
    return np.vstack([rows[~hit], left]), np.concatenate([features[~hit], np.array(owners, np.int64)])

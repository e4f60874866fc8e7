"""Where a robot of some radius can stand and drive: exact clearances and a lattice for finding ways.

The lattice is for choosing ways only; every motion is held to the exact distances.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

# Side of a lattice cell.  Coarser loses ways through narrow doors, finer costs time squared.
CELL_M = 0.1
# Nodes keep this much more than the robot's radius, so that the straight line between neighbours is clear.
NODE_MARGIN_M = 0.02
# A way avoids coming this much nearer to things than it must: such nodes count as longer.
ELBOW_ROOM_M = 0.15
TIGHT_COST = 3.0


@njit(cache=True)
def _to_segment(px, py, ax, ay, bx, by):
    """Squared distance of a point to a segment."""
    dx, dy = bx - ax, by - ay
    length = dx * dx + dy * dy
    share = 0.0 if length == 0.0 else min(1.0, max(0.0, ((px - ax) * dx + (py - ay) * dy) / length))
    ex, ey = ax + share * dx - px, ay + share * dy - py
    return ex * ex + ey * ey


@njit(cache=True)
def clearance(ax: float, ay: float, bx: float, by: float, segments: NDArray[np.float64]) -> float:
    """Metres from the segment (ax, ay)-(bx, by) to the nearest of `segments` [n 4]; inf for none."""
    best = np.inf
    for cx, cy, dx, dy in segments:
        a = (bx - ax) * (cy - ay) - (by - ay) * (cx - ax)
        b = (bx - ax) * (dy - ay) - (by - ay) * (dx - ax)
        c = (dx - cx) * (ay - cy) - (dy - cy) * (ax - cx)
        d = (dx - cx) * (by - cy) - (dy - cy) * (bx - cx)
        if a * b < 0.0 and c * d < 0.0:
            return 0.0
        near = min(_to_segment(ax, ay, cx, cy, dx, dy), _to_segment(bx, by, cx, cy, dx, dy))
        near = min(near, _to_segment(cx, cy, ax, ay, bx, by), _to_segment(dx, dy, ax, ay, bx, by))
        best = min(best, near)
    return np.sqrt(best)


@dataclass(frozen=True, eq=False)
class FreeSpace:
    """Lattice of places a robot's centre can be.

    Attributes:
        left_m, bottom_m: centre of the node at row 0, column 0.
        cost: [rows columns] of passing a node: inf where the robot would touch something.
    """

    left_m: float
    bottom_m: float
    cost: NDArray[np.float32]

    @property
    def free(self) -> NDArray[np.bool_]:
        """[rows columns] whether the robot can stand at the node."""
        return np.isfinite(self.cost)

    def components(self) -> NDArray[np.int32]:
        """[rows columns] number of the connected part a node belongs to, 0 where it is not free."""
        return ndimage.label(self.free)[0]

    def node(self, x: float, y: float) -> tuple[int, int]:
        """Row and column of the node nearest to a point, moved to the border if outside."""
        row, column = round((y - self.bottom_m) / CELL_M), round((x - self.left_m) / CELL_M)
        rows, columns = self.cost.shape
        return min(max(row, 0), rows - 1), min(max(column, 0), columns - 1)

    def place(self, rows: NDArray, columns: NDArray) -> NDArray[np.float64]:
        """[... 2] x, y in metres of nodes."""
        return np.stack([self.left_m + CELL_M * columns, self.bottom_m + CELL_M * rows], axis=-1)


def free_space(
    segments: NDArray[np.float64],
    solids: Sequence[NDArray[np.float64]],
    bounds: tuple[float, float, float, float],
    radius_m: float,
) -> FreeSpace:
    """The lattice for a robot of this radius.

    Args:
        segments: [n 4] what it may not touch.
        solids: outlines [k 2] of what it cannot be inside of.
        bounds: left, bottom, right, top of the lattice.
        radius_m: of the robot.
    """
    low, high = np.array(bounds[:2]), np.array(bounds[2:])
    columns, rows = (int(n) for n in np.floor((high - low) / CELL_M) + 1)
    cost = np.ones((rows, columns), np.float32)
    near = radius_m + NODE_MARGIN_M
    _stamp(cost, segments, low[0], low[1], near + ELBOW_ROOM_M, TIGHT_COST)
    _stamp(cost, segments, low[0], low[1], near, np.inf)
    x, y = (low[axis] + CELL_M * np.arange(count) for axis, count in enumerate((columns, rows)))
    for outline in solids:
        (left, bottom), (right, top) = outline.min(axis=0), outline.max(axis=0)
        across, up = slice(*np.searchsorted(x, [left, right])), slice(*np.searchsorted(y, [bottom, top]))
        inside = shapely.contains_xy(shapely.Polygon(outline), *np.meshgrid(x[across], y[up]))
        cost[up, across][inside] = np.inf
    return FreeSpace(float(low[0]), float(low[1]), cost)


@njit(cache=True)
def _stamp(cost, segments, left, bottom, radius, value):
    """Give every node nearer than `radius` to a segment a cost."""
    rows, columns = cost.shape
    for ax, ay, bx, by in segments:
        first = max(int((min(ay, by) - radius - bottom) / CELL_M), 0)
        last = min(int((max(ay, by) + radius - bottom) / CELL_M) + 1, rows - 1)
        start = max(int((min(ax, bx) - radius - left) / CELL_M), 0)
        stop = min(int((max(ax, bx) + radius - left) / CELL_M) + 1, columns - 1)
        for row in range(first, last + 1):
            for column in range(start, stop + 1):
                x, y = left + CELL_M * column, bottom + CELL_M * row
                if _to_segment(x, y, ax, ay, bx, by) < radius * radius:
                    cost[row, column] = value


@njit(cache=True)
def way_lengths(cost: NDArray[np.float32], row: int, column: int) -> NDArray[np.float32]:
    """[rows columns] cost, in cells, of the cheapest way to one node; inf where there is none.

    Label correcting over 8 neighbours, a diagonal step only where both nodes beside it are free.
    """
    rows, columns = cost.shape
    best = np.full((rows, columns), np.inf, np.float32)
    waiting = np.zeros((rows, columns), np.bool_)
    size = rows * columns + 1  # a node waits at most once, so the ring never overflows
    queue = np.empty(size, np.int64)
    head, tail = 0, 1
    queue[0], best[row, column] = row * columns + column, 0.0
    while head != tail:
        r, c = queue[head] // columns, queue[head] % columns
        head = (head + 1) % size
        waiting[r, c] = False
        for dr in range(-1, 2):
            for dc in range(-1, 2):
                nr, nc = r + dr, c + dc
                if nr < 0 or nc < 0 or nr >= rows or nc >= columns or cost[nr, nc] == np.inf:
                    continue
                if cost[nr, c] == np.inf or cost[r, nc] == np.inf:
                    continue
                length = best[r, c] + np.float32(np.sqrt(dr * dr + dc * dc)) * cost[nr, nc]
                if length < best[nr, nc]:
                    best[nr, nc] = length
                    if not waiting[nr, nc]:
                        waiting[nr, nc] = True
                        queue[tail] = nr * columns + nc
                        tail = (tail + 1) % size
    return best

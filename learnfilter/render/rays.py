# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""Cast rays at line segments: a walk over a uniform grid.

Angles are counter-clockwise from +x, lengths in metres.  A ray that starts on a segment meets it at
range 0; a ray that runs exactly along a segment does not meet it (its ends are met through what
joins there).  All arithmetic is float64; only the result is rounded to float32.

Source: the grid walk of Amanatides & Woo 1987, "A fast voxel traversal algorithm for ray tracing".
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.shapes import check

# A segment counts as this much longer at either end, as a share of its length: rays aimed at the
# joint of two walls must not slip through by rounding.
JOINT = 1e-9
# A segment is registered in every cell it comes this near to, as a share of a cell: walls on a cell
# border belong to both cells, and rounding along the walk must stay well below it.
MARGIN = 1e-6
# Stands for the inverse of a direction's zero component: finite, so that no product is NaN.
ALONG_AXIS = 1e300
# Cells get the side at which evenly spread segments would be this many a cell, within these bounds.  Office
# plans get 2 m (1 to 3 m are within a tenth in speed); a scanned floor, whose outlines are steps of single
# pixels, gets 0.3 to 0.5 m and casts 6 times as fast as at 2 m.
SEGMENTS_A_CELL = 2.0
CELL_M = (0.25, 2.0)
# More cells than this along a side cost memory and win nothing; larger plans get larger cells.
MOST_CELLS = 1024


@dataclass(frozen=True, eq=False)
class Scene:
    """Segments sorted into the cells of a uniform grid.

    Attributes:
        left_m, bottom_m: lower left corner of the grid.
        cell_m: side of a cell.
        rows, columns: size of the grid.
        start: [rows columns + 1] where each cell's run begins in the two arrays below.
        lines: [m 4] x0 y0 dx dy, a copy of each segment in every cell that holds it, in grid order.
        source: [m] which segment each line is.
    """

    left_m: float
    bottom_m: float
    cell_m: float
    rows: int
    columns: int
    start: NDArray[np.int32]
    lines: NDArray[np.float64]
    source: NDArray[np.int32]


def build_scene(segments: ArrayLike, cell_m: float | None = None) -> Scene:
    """Sort segments into a grid.

    Args:
        segments: [n 4] x0 y0 x1 y1 in metres; may be empty.
        cell_m: side of a cell; None chooses it.  Speed depends on it, results do not.

    Returns:
        What `cast` and `cast_fan` walk.
    """
    segments = np.ascontiguousarray(segments, dtype=np.float64).reshape(-1, 4)
    points = segments.reshape(-1, 2) if len(segments) else np.zeros((1, 2))
    low, high = points.min(axis=0), points.max(axis=0)
    if cell_m is None:
        area_m2 = np.prod(high - low)
        cell_m = float(np.clip(np.sqrt(SEGMENTS_A_CELL * area_m2 / (len(points) / 2)), *CELL_M))
    cell_m = max(cell_m, float((high - low).max()) / MOST_CELLS)
    low = low - cell_m  # a ring of empty cells around, which the walk counts on
    columns, rows = (int(n) for n in np.ceil((high - low) / cell_m + 1))
    cells, source = _register(segments, float(low[0]), float(low[1]), cell_m, rows, columns)
    order = np.argsort(cells, kind="stable")
    start = np.searchsorted(cells[order], np.arange(rows * columns + 1)).astype(np.int32)
    lines = np.hstack([segments[:, :2], segments[:, 2:] - segments[:, :2]])[source[order]]
    return Scene(float(low[0]), float(low[1]), cell_m, rows, columns, start, lines, source[order])


def cast(
    scene: Scene, x: ArrayLike, y: ArrayLike, angle: ArrayLike, max_range_m: float
) -> tuple[NDArray[np.float32], NDArray[np.int32]]:
    """Where each ray first meets a segment.

    Args:
        scene: from `build_scene`.
        x, y: [k] where rays start, metres; may lie outside the scene.
        angle: [k] direction, radians.
        max_range_m: nothing beyond it is met; may be inf.

    Returns:
        range_m [k], inf where nothing is met, and segment [k], -1 there.

    Raises:
        ShapeError: x, y and angle differ in length.
        ValueError: a ray is not finite.
    """
    x, y, angle = (np.ascontiguousarray(a, dtype=np.float64) for a in (x, y, angle))
    sizes = check("x", x, "k")
    check("y", y, "k", **sizes)
    check("angle", angle, "k", **sizes)
    _check_finite(x, y, angle)
    range_m = np.empty(len(x), np.float32)
    segment = np.empty(len(x), np.int32)
    _cast(x, y, angle, float(max_range_m), *_grid(scene), range_m, segment)
    return range_m, segment


def cast_fan(
    scene: Scene, x: ArrayLike, y: ArrayLike, angles: ArrayLike, max_range_m: float
) -> tuple[NDArray[np.float32], NDArray[np.int32]]:
    """Where each ray of one fan of angles, cast from each point, first meets a segment.

    Args:
        scene: from `build_scene`.
        x, y: [n] where fans start, metres.
        angles: [p] directions of every fan, radians.
        max_range_m: nothing beyond it is met; may be inf.

    Returns:
        range_m [n p], inf where nothing is met, and segment [n p], -1 there.

    Raises:
        ShapeError: x and y differ in length, or an array is not a row.
        ValueError: a ray is not finite.
    """
    x, y, angles = (np.ascontiguousarray(a, dtype=np.float64) for a in (x, y, angles))
    check("y", y, "n", **check("x", x, "n"))
    check("angles", angles, "p")
    _check_finite(x, y, angles)
    range_m = np.empty((len(x), len(angles)), np.float32)
    segment = np.empty((len(x), len(angles)), np.int32)
    directions = np.stack([np.cos(angles), np.sin(angles)], axis=1)
    _cast_fan(x, y, directions, float(max_range_m), *_grid(scene), range_m, segment)
    return range_m, segment


def _check_finite(*arrays: NDArray[np.float64]) -> None:
    # a NaN would become an index into memory that is not ours
    if not all(np.isfinite(array).all() for array in arrays):
        raise ValueError("rays need finite origins and angles")


Grid = tuple[float, float, float, int, int, NDArray[np.int32], NDArray[np.float64], NDArray[np.int32]]


def _grid(scene: Scene) -> Grid:
    place = (scene.left_m, scene.bottom_m, scene.cell_m, scene.rows, scene.columns)
    return *place, scene.start, scene.lines, scene.source


@njit(cache=True)
def _register(segments, left, bottom, cell, rows, columns):
    """Every (cell, segment) pair in which the segment comes within the margin of the cell."""
    margin = MARGIN * cell
    cells, source = [], []
    for i in range(len(segments)):
        x0, y0, x1, y1 = segments[i]
        if y0 > y1:
            x0, y0, x1, y1 = x1, y1, x0, y0
        first = max(int((y0 - margin - bottom) / cell), 0)
        last = min(int((y1 + margin - bottom) / cell), rows - 1)
        for row in range(first, last + 1):
            # the part of the segment inside this row of cells, then the columns under it
            lower, upper = bottom + row * cell - margin, bottom + (row + 1) * cell + margin
            xa, xb = x0, x1
            if y0 < lower:
                xa = x0 + (x1 - x0) * (lower - y0) / (y1 - y0)
            if y1 > upper:
                xb = x0 + (x1 - x0) * (upper - y0) / (y1 - y0)
            start = max(int((min(xa, xb) - margin - left) / cell), 0)
            stop = min(int((max(xa, xb) + margin - left) / cell), columns - 1)
            for column in range(start, stop + 1):
                cells.append(row * columns + column)
                source.append(i)
    return np.array(cells, dtype=np.int64), np.array(source, dtype=np.int32)


@njit(error_model="numpy")
def _entry(x, y, over_x, over_y, low_x, low_y, high_x, high_y):
    """Range at which a ray enters a box it starts outside of; inf when it misses it."""
    xa, xb = (low_x - x) * over_x, (high_x - x) * over_x
    ya, yb = (low_y - y) * over_y, (high_y - y) * over_y
    near, far = max(min(xa, xb), min(ya, yb)), min(max(xa, xb), max(ya, yb))
    return near if 0.0 <= near <= far else np.inf


@njit(error_model="numpy")
def _walk(x, y, ux, uy, limit, left, bottom, cell, rows, columns, start, lines, source):
    """Range and segment of one ray's first hit within `limit`; (inf, -1) when there is none.

    Written without branches where the data decide them: mispredicted, they cost a third of the time.
    """
    over_x = 1.0 / ux if ux != 0.0 else ALONG_AXIS
    over_y = 1.0 / uy if uy != 0.0 else ALONG_AXIS
    # all segments lie in the box half a cell inside the grid, so the walk ends before the grid does
    low_x, high_x = left + 0.5 * cell, left + (columns - 0.5) * cell
    low_y, high_y = bottom + 0.5 * cell, bottom + (rows - 0.5) * cell
    enter = 0.0
    if not (low_x <= x <= high_x and low_y <= y <= high_y):
        enter = _entry(x, y, over_x, over_y, low_x, low_y, high_x, high_y)
        if enter >= limit:
            return np.inf, -1
    column = min(max(int((x + enter * ux - left) / cell), 0), columns - 1)
    row = min(max(int((y + enter * uy - bottom) / cell), 0), rows - 1)
    place = row * columns + column
    to_right, to_top = over_x > 0.0, over_y > 0.0
    step_x, step_y = (1 if to_right else -1), (columns if to_top else -columns)
    # range at which the ray crosses the next border of a column, and from one border to the next
    next_x, wide = (left + (column + to_right) * cell - x) * over_x, cell * abs(over_x)
    next_y, high = (bottom + (row + to_top) * cell - y) * over_y, cell * abs(over_y)
    leave_x = ((high_x if to_right else low_x) - x) * over_x
    leave_y = ((high_y if to_top else low_y) - y) * over_y
    best, hit = min(limit, leave_x, leave_y), -1
    # rounding of origins astronomically far away is the one way out of the grid
    while 0 <= place < rows * columns:
        for k in range(start[place], start[place + 1]):
            ax, ay = lines[k, 0] - x, lines[k, 1] - y
            dx, dy = lines[k, 2], lines[k, 3]
            # the ray's line meets the segment at the share `share / across` of its length
            across = ux * dy - uy * dx
            share = ax * uy - ay * ux
            reach = (ax * dy - ay * dx) / across  # NaN along the segment: no hit
            met = (share * (share - across) <= JOINT * across * across) & (reach >= 0.0) & (reach < best)
            best = reach if met else best
            hit = k if met else hit
        if best <= min(next_x, next_y):
            break
        by_column = next_x < next_y
        place += step_x if by_column else step_y
        after_x, after_y = next_x + wide, next_y + high
        next_x, next_y = (after_x if by_column else next_x), (next_y if by_column else after_y)
    return (best, source[hit]) if hit >= 0 else (np.inf, -1)


@njit(cache=True, parallel=True, error_model="numpy")
def _cast(x, y, angle, limit, left, bottom, cell, rows, columns, start, lines, source, range_m, segment):
    for i in prange(len(x)):
        range_m[i], segment[i] = _walk(
            x[i], y[i], np.cos(angle[i]), np.sin(angle[i]),
            limit, left, bottom, cell, rows, columns, start, lines, source,
        )  # fmt: skip


@njit(cache=True, parallel=True, error_model="numpy")
def _cast_fan(
    x, y, directions, limit, left, bottom, cell, rows, columns, start, lines, source, range_m, segment
):
    for i in prange(len(x)):
        for j in range(len(directions)):
            range_m[i, j], segment[i, j] = _walk(
                x[i], y[i], directions[j, 0], directions[j, 1],
                limit, left, bottom, cell, rows, columns, start, lines, source,
            )  # fmt: skip

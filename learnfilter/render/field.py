# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""Distance to the nearest surface, exact at the centres of a lattice."""

from __future__ import annotations

import numpy as np
from numba import njit, prange
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.grid import PoseGrid
from learnfilter.plan.floorplan import DOOR, SHUT, WINDOW, FloorPlan

# Farther than this, all surfaces are equally far: no likelihood tells 2 m beside a wall from 3 m.
CAP_M = 2.0


def distance_field(
    plan: FloorPlan, grid: PoseGrid, scale: int = 2, windows: str = "unsure", cap_m: float = CAP_M
) -> NDArray[np.float32]:
    """Distance from every sub-cell's centre to the nearest surface a ray could return from.

    Surfaces are walls, solid things, shut doors and windows (glass is there even where a ray may
    pass it) unless windows are 'clear'.  Open and unknown doors are none: their leaf is elsewhere.

    Args:
        plan: what stands where.
        grid: the lattice.
        scale: sub-cells a cell side.
        windows: 'unsure', 'solid' or 'clear', as for `render_site`.
        cap_m: distances are cut off here.

    Returns:
        [rows scale, columns scale] metres.
    """
    surface = (plan.kind != DOOR) | (plan.state == SHUT)
    if windows == "clear":
        surface &= plan.kind != WINDOW
    return distance_lattice(
        plan.segments[surface],
        grid.left_m,
        grid.bottom_m,
        grid.cell_m / scale,
        grid.rows * scale,
        grid.columns * scale,
        cap_m,
    )


def distance_lattice(
    segments: ArrayLike, left_m: float, bottom_m: float, step_m: float, rows: int, columns: int, cap_m: float
) -> NDArray[np.float32]:
    """Distance from each lattice point to the nearest segment.

    Args:
        segments: [n 4] x0 y0 x1 y1 in metres.
        left_m, bottom_m: outer lower left corner of the lattice.
        step_m: lattice pitch; points are at (i + 1/2) step_m.
        rows, columns: lattice size.
        cap_m: distances are cut off here.

    Returns:
        [rows columns] metres, at most cap_m.

    Raises:
        ConfigError: a size or the cap is not positive.
    """
    if min(step_m, rows, columns, cap_m) <= 0:
        raise ConfigError("a lattice needs positive sizes", got=(step_m, rows, columns, cap_m))
    segments = np.ascontiguousarray(segments, dtype=np.float64).reshape(-1, 4)
    squared = np.full((rows, columns), float(cap_m) ** 2)
    _lower(segments, left_m, bottom_m, step_m, float(cap_m), squared)
    return np.sqrt(squared).astype(np.float32)


@njit(cache=True, parallel=True, error_model="numpy")
def _lower(segments, left, bottom, step, cap, squared):
    """Bring squared distances [rows columns] down to those of the segments within reach."""
    rows, columns = squared.shape
    for row in prange(rows):
        y = bottom + (row + 0.5) * step
        for i in range(len(segments)):
            x0, y0, x1, y1 = segments[i]
            if y < min(y0, y1) - cap or y > max(y0, y1) + cap:
                continue
            dx, dy = x1 - x0, y1 - y0
            length2 = dx * dx + dy * dy
            # only columns within reach of the part of the segment that this row can reach
            xa, xb = x0, x1
            if dy != 0.0:
                at_low, at_high = (y - cap - y0) / dy, (y + cap - y0) / dy
                xa = x0 + dx * min(max(min(at_low, at_high), 0.0), 1.0)
                xb = x0 + dx * min(max(max(at_low, at_high), 0.0), 1.0)
            first = max(int(np.floor((min(xa, xb) - cap - left) / step - 0.5)), 0)
            last = min(int(np.ceil((max(xa, xb) + cap - left) / step - 0.5)), columns - 1)
            for column in range(first, last + 1):
                ax, ay = left + (column + 0.5) * step - x0, y - y0
                share = (ax * dx + ay * dy) / length2 if length2 > 0.0 else 0.0
                share = min(max(share, 0.0), 1.0)
                off_x, off_y = ax - share * dx, ay - share * dy
                squared[row, column] = min(squared[row, column], off_x * off_x + off_y * off_y)

"""Which cells a robot can be in.

All is decided on a finer lattice than the belief's, whose pitch is below the robot's radius.  Then
two neighbouring points that are clear of walls cannot have a wall between them, and a doorway
narrower than a cell still joins its rooms.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray
from scipy import ndimage

from learnfilter.core.errors import ConfigError, PlanError
from learnfilter.core.grid import PoseGrid
from learnfilter.plan.floorplan import DOOR, SHUT, FloorPlan
from learnfilter.render.field import distance_lattice

# Pitch of the finer lattice at most; half of it is lost at each side of a narrow passage.
PITCH_M = 0.1
# A gap in the outer walls narrower than twice this does not let the outside in.  Larger: a courtyard
# passage is closed as well; smaller: an entrance drawn without its door floods the house.
OUTSIDE_REACH_M = 0.75
# If the indoors is less than this share of all clear area within the plan's bounds, the building
# stands open (an undrawn gate, a site without outer walls) and the outside is not told from it.
INDOOR_SHARE = 0.1
# Half a kilometre square in cells of 0.25 m; larger plans are most likely not in metres.
MOST_CELLS = 4_000_000
# How far from a free point a seed may have been clicked.
SEED_SLACK_M = 1.0


def grid_for(plan: FloorPlan, headings: int, cell_m: float) -> PoseGrid:
    """The lattice that covers the plan's bounds and one cell more on each side.

    Raises:
        ConfigError: it would be empty.
        PlanError: it would be beyond what a laptop holds.
    """
    if headings < 1 or not cell_m > 0:
        raise ConfigError("the grid is empty", place="grid", expected="headings >= 1, cell_m > 0")
    left, bottom, right, top = plan.bounds
    rows, columns = (int(np.ceil(size / cell_m - 1e-9)) + 2 for size in (top - bottom, right - left))
    if rows * columns > MOST_CELLS:
        raise PlanError(
            f"too large for cells of {cell_m} m", place=plan.name,
            expected=f"at most {MOST_CELLS:,} cells: check the file's units, or take larger cells",
            got=f"{rows * columns:,}",
        )  # fmt: skip
    return PoseGrid(headings, rows, columns, cell_m, left - cell_m, bottom - cell_m)


def live_cells(plan: FloorPlan, grid: PoseGrid, robot_radius_m: float) -> NDArray[np.bool_]:
    """Cells in which the robot can stand and to which it can drive.

    A cell is live if its centre is farther than the radius from every wall, solid thing, window and
    shut door (open and unknown doors let the robot pass), inside no solid or unmapped area, and
    joined to the plan's seed, or else in the largest part that is not outdoors.  Outdoors is what can
    be reached from beyond the plan's bounds with all doors shut, through gaps of more than
    2 OUTSIDE_REACH_M; where hardly anything else is left, nothing counts as outdoors.

    Args:
        plan: what stands where.
        grid: the lattice.
        robot_radius_m: of the robot's footprint.

    Returns:
        [rows columns].

    Raises:
        ConfigError: the radius is not positive.
        PlanError: the seed is in no free place, or no cell is live.
    """
    if not robot_radius_m > 0:
        raise ConfigError("the robot has no size", place="robot_radius_m", got=robot_radius_m)
    fine = _finer(plan, grid, robot_radius_m)
    covered = _covered_points(plan, fine)
    clear = _clear_points(plan, fine, robot_radius_m) & ~covered
    outdoors = _outdoors(plan, fine, robot_radius_m, covered) & clear
    if plan.seed is None:
        reached = _largest(plan, fine, clear, outdoors)
    else:
        reached = _around_seed(plan.seed, fine, clear, outdoors)
    live = fine.at_cells(reached, grid)
    if not live.any():
        raise PlanError(
            "no cell is free for the robot",
            place=plan.name,
            expected=f"room for a radius of {robot_radius_m} m",
        )
    return live


@dataclass(frozen=True)
class _Lattice:
    """Points at (i + 1/2) pitch over a grid and a rim around it; `scale` points a cell side, odd."""

    left_m: float
    bottom_m: float
    pitch_m: float
    rows: int
    columns: int
    scale: int
    rim: int

    def x(self) -> NDArray[np.floating]:
        return self.left_m + (np.arange(self.columns) + 0.5) * self.pitch_m

    def y(self) -> NDArray[np.floating]:
        return self.bottom_m + (np.arange(self.rows) + 0.5) * self.pitch_m

    def distance(self, segments: NDArray[np.float64], cap_m: float) -> NDArray[np.float32]:
        return distance_lattice(
            segments, self.left_m, self.bottom_m, self.pitch_m, self.rows, self.columns, cap_m
        )

    def at_cells(self, points: NDArray[np.bool_], grid: PoseGrid) -> NDArray[np.bool_]:
        """The values at the cells' centres, which are lattice points because `scale` is odd."""
        first = self.rim + self.scale // 2
        cells = points[first :: self.scale, first :: self.scale]
        return np.ascontiguousarray(cells[: grid.rows, : grid.columns])


def _finer(plan: FloorPlan, grid: PoseGrid, radius: float) -> _Lattice:
    scale = int(np.ceil(grid.cell_m / min(PITCH_M, 0.9 * radius)))
    scale += 1 - scale % 2
    pitch = grid.cell_m / scale
    left, bottom, right, top = plan.bounds
    beyond = max(
        grid.left_m - left,
        grid.bottom_m - bottom,
        right - grid.left_m - grid.columns * grid.cell_m,
        top - grid.bottom_m - grid.rows * grid.cell_m,
        0.0,
    )
    rim = int(np.ceil((beyond + max(OUTSIDE_REACH_M, radius)) / pitch)) + 1
    return _Lattice(
        grid.left_m - rim * pitch,
        grid.bottom_m - rim * pitch,
        pitch,
        grid.rows * scale + 2 * rim,
        grid.columns * scale + 2 * rim,
        scale,
        rim,
    )


def _covered_points(plan: FloorPlan, fine: _Lattice) -> NDArray[np.bool_]:
    """Inside of solid or unmapped area."""
    covered = np.zeros((fine.rows, fine.columns), dtype=bool)
    x, y = fine.x(), fine.y()
    for outline in (*plan.solids, *plan.unmapped):
        (left, bottom), (right, top) = outline.min(axis=0), outline.max(axis=0)
        columns = slice(*np.searchsorted(x, [left, right]))
        rows = slice(*np.searchsorted(y, [bottom, top]))
        area = shapely.Polygon(outline)
        shapely.prepare(area)
        covered[rows, columns] |= shapely.contains_xy(area, *np.meshgrid(x[columns], y[rows]))
    return covered


def _clear_points(plan: FloorPlan, fine: _Lattice, radius: float) -> NDArray[np.bool_]:
    barrier = (plan.kind != DOOR) | (plan.state == SHUT)
    return fine.distance(plan.segments[barrier], radius + fine.pitch_m) > radius


def _outdoors(
    plan: FloorPlan, fine: _Lattice, radius: float, covered: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """What a disc of OUTSIDE_REACH_M rolling in from beyond the bounds sweeps, all doors shut.

    Its centre keeps out of covered area, so a plan that unmapped area surrounds has no outdoors.
    """
    reach = max(OUTSIDE_REACH_M, radius)
    parts, _ = ndimage.label((fine.distance(plan.segments, reach + fine.pitch_m) > reach) & ~covered)
    # the rim is wide enough for its corners to be clear of walls
    core = np.isin(parts, parts[[0, 0, -1, -1], [0, -1, 0, -1]]) & (parts > 0)
    if not core.any():
        return core
    # shorter than the disc's radius, so never through a wall
    return ndimage.distance_transform_edt(~core, sampling=fine.pitch_m) <= reach - radius + fine.pitch_m


def _around_seed(
    seed: tuple[float, float], fine: _Lattice, clear: NDArray[np.bool_], outdoors: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """The part that holds the seed; the outdoors too if the seed is there."""
    to_seed = np.hypot(fine.x() - seed[0], (fine.y() - seed[1])[:, None])
    nearest = np.unravel_index(np.where(clear, to_seed, np.inf).argmin(), clear.shape)
    if not clear.any() or to_seed[nearest] > SEED_SLACK_M:
        raise PlanError(
            "no free place for the robot near the seed",
            place="the plan's seed",
            expected="a free point",
            got=seed,
        )
    parts, _ = ndimage.label(clear if outdoors[nearest] else clear & ~outdoors)
    return parts == parts[nearest]


def _largest(
    plan: FloorPlan, fine: _Lattice, clear: NDArray[np.bool_], outdoors: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """The largest part indoors, or of everything where the building stands open."""
    left, bottom, right, top = plan.bounds
    x, y = fine.x(), fine.y()[:, None]
    within = clear & (x > left) & (x < right) & (y > bottom) & (y < top)
    indoors = clear & ~outdoors
    if np.count_nonzero(indoors) < INDOOR_SHARE * np.count_nonzero(within):
        indoors = within
    parts, _ = ndimage.label(indoors)
    sizes = np.bincount(parts.ravel())
    sizes[0] = 0
    return (parts == sizes.argmax()) & indoors

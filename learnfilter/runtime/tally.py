"""Which parts of the plan a locked robot saw, and which were not as drawn."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.site import RobotSite

PATCH = 2  # cells on a side of the patches that are counted
TOLERANCE_M = 0.2  # within it a column agrees: the pose is known to about half a cell
TOLERANCE_SHARE = 0.05  # more of it with range, where headings and bearings are off by half a bin


class Counts(NamedTuple):
    """Strips that spoke about each patch of the plan, [r c] from the lattice's lower left corner.

    Attributes:
        met: found a surface where the plan has one.
        gone: looked through it.
        new: met something where the plan has nothing, in front of what it has.
    """

    met: NDArray[np.int32]
    gone: NDArray[np.int32]
    new: NDArray[np.int32]

    @classmethod
    def none(cls, grid: PoseGrid) -> Counts:
        """Before the first strip."""
        shape = -(-grid.rows // PATCH), -(-grid.columns // PATCH)
        return cls(*(np.zeros(shape, np.int32) for _ in cls._fields))


def count(counts: Counts, site: RobotSite, index: NDArray[np.int32], pose: NDArray, depth_m: NDArray) -> None:
    """Add what one strip says, in place; each patch is counted once a strip, by the majority of columns.

    Args:
        counts: added to.
        site: the plan.
        index: [r c] of each live cell among the site's, -1 elsewhere.
        pose: [3] of the sensor.
        depth_m: [w] on ring bearings, NaN where nothing came back.
    """
    row, column = site.grid.cell_of(pose[0], pose[1])
    if not (0 <= row < site.grid.rows and 0 <= column < site.grid.columns) or index[row, column] < 0:
        return
    layout, cell = site.layout, index[row, column]
    turned = int(np.rint(pose[2] / layout.step_rad))
    looks_at = (turned + layout.first + np.arange(layout.columns)) % layout.bearings
    around = (looks_at[:, None] + [-1, 0, 1]) % layout.bearings
    expected, nearest = site.range_m[cell, looks_at], site.range_m[cell, around].min(axis=1)
    farthest = site.range_m[cell, around].max(axis=1)
    usable = np.isfinite(depth_m) & ~site.unsure[cell, around].any(axis=1) & layout.present()
    room = TOLERANCE_M + TOLERANCE_SHARE * depth_m
    short = usable & (depth_m < nearest - room)
    drawn = usable & ~short & np.isfinite(expected)
    bearings = pose[2] + layout.strip_bearings()
    _vote(counts.new, _patch(site.grid, pose, depth_m, bearings)[short])
    patches, missed = _patch(site.grid, pose, expected, bearings), depth_m > farthest + room
    seen = np.unique(patches[drawn])
    through = np.array([missed[drawn & (patches == p)].mean() > 0.5 for p in seen], bool)
    _vote(counts.gone, seen[through])
    _vote(counts.met, seen[~through])


def _vote(counts: NDArray[np.int32], patches: NDArray[np.int64]) -> None:
    inside = np.unique(patches[(patches >= 0) & (patches < counts.size)])
    counts.reshape(-1)[inside] += 1


def _patch(grid: PoseGrid, pose: NDArray, range_m: NDArray, bearings: NDArray) -> NDArray[np.int64]:
    """[w] flat patch in which columns end; -1 outside the lattice."""
    reach = np.where(np.isfinite(range_m), range_m, 0.0)
    row, column = grid.cell_of(pose[0] + reach * np.cos(bearings), pose[1] + reach * np.sin(bearings))
    inside = (row >= 0) & (row < grid.rows) & (column >= 0) & (column < grid.columns)
    return np.where(inside, row // PATCH * -(-grid.columns // PATCH) + column // PATCH, -1)

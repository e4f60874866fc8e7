"""A belief on one lattice, summed to another."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.core.poses import wrap


def regrid(belief: NDArray, own: PoseGrid, common: PoseGrid) -> NDArray:
    """[h r c] on `common` of a belief [h r c] on `own`: each bin's mass goes where the bin lies.

    A bin that lies across an edge is split by the share on either side.  Mass off the common lattice is
    dropped.
    """
    if own == common:
        return belief
    for axis, (share, size) in enumerate(zip(_shares(own, common), common.shape, strict=True)):
        if share.shape != (size, size) or not np.array_equal(share, np.eye(size)):
            belief = np.moveaxis(np.tensordot(share, belief, (1, axis)), 0, axis)
    return belief


@lru_cache(maxsize=4)  # a study asks for the same pair at every strip
def _shares(own: PoseGrid, common: PoseGrid) -> tuple[NDArray, NDArray, NDArray]:
    """Share of each own bin that lies in each common bin, axis by axis: [H h], [R r], [C c]."""
    gap = np.abs(wrap(np.subtract.outer(common.heading_centres(), own.heading_centres())))
    widths = common.heading_step_rad, own.heading_step_rad
    headings = np.minimum((sum(widths) / 2 - gap).clip(0), min(widths)) / own.heading_step_rad
    return (
        headings,
        _overlap(common.bottom_m, common.cell_m, common.rows, own.bottom_m, own.cell_m, own.rows),
        _overlap(common.left_m, common.cell_m, common.columns, own.left_m, own.cell_m, own.columns),
    )


def _overlap(start: float, cell: float, count: int, own_start: float, own_cell: float, own: int) -> NDArray:
    """[count own] share of each own interval inside each common one."""
    low = start + cell * np.arange(count)[:, None]
    own_low = own_start + own_cell * np.arange(own)
    inside = np.minimum(low + cell, own_low + own_cell) - np.maximum(low, own_low)
    return inside.clip(0) / own_cell

"""A site: a floor plan rendered for one sensor on one lattice of poses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout


@dataclass(frozen=True, eq=False)
class Site:
    """What the plan predicts at every live cell.

    Attributes:
        name: of the plan.
        grid: the lattice.
        layout: how strips lie on its rings.
        max_range_m: farther than this nothing comes back.
        cells: [n 2] row, column of each live cell, row-major.
        live: [rows columns] whether a cell is live.
        range_m: [n p] expected range along each ring bearing; inf where nothing is within reach.
        unsure: [n p] True where the ray ended at a thing that may be open (unknown door, window
            by setting) or at unmapped area: no range evidence there.
        finish: [n p] int16 finish of what the ray meets, -1 unknown.
        palette: [f 3] linear RGB of each finish.
        field_m: [rows*s columns*s] distance of sub-cell centres to the nearest surface, metres.
        field_scale: s, sub-cells a cell side.
        key: content hash of all that went into it.
    """

    name: str
    grid: PoseGrid
    layout: RingLayout
    max_range_m: float
    cells: NDArray[np.int32]
    live: NDArray[np.bool_]
    range_m: NDArray[np.float32]
    unsure: NDArray[np.bool_]
    finish: NDArray[np.int16]
    palette: NDArray[np.float32]
    field_m: NDArray[np.float32]
    field_scale: int
    key: str

    @property
    def n_cells(self) -> int:
        return len(self.cells)

    def index_of(self) -> NDArray[np.int32]:
        """[rows columns] number of each live cell, -1 elsewhere."""
        index = np.full(self.live.shape, -1, dtype=np.int32)
        index[self.cells[:, 0], self.cells[:, 1]] = np.arange(self.n_cells, dtype=np.int32)
        return index

    def colour(self) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
        """Linear RGB [n p 3] (zero where unknown) and whether it is known [n p]."""
        palette = np.vstack([self.palette, np.zeros((1, 3), np.float32)])
        return palette[self.finish], self.finish >= 0

    def nearest_live(
        self, poses: NDArray[np.float64]
    ) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.bool_]]:
        """Live cell number and heading bin that stand for sensor poses [t 3], and whether the pose's own
        cell is live (else the nearest live one was taken)."""
        row, column = self.grid.cell_of(poses[:, 0], poses[:, 1])
        r, c = row.clip(0, self.grid.rows - 1), column.clip(0, self.grid.columns - 1)
        cell = np.where((r == row) & (c == column), self.index_of()[r, c], -1).astype(np.int64)
        own = cell >= 0
        for i in np.flatnonzero(~own):
            cell[i] = np.argmin(((self.cells - [row[i], column[i]]) ** 2).sum(axis=1))
        return cell, self.grid.heading_of(poses[:, 2]), own

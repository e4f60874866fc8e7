"""The lattice of poses a belief lives on.

Arrays over poses have axes [heading row column]; row 0 is at the smallest y.  Heading bin h is
centred at 2 pi h / H, cell centres at (i + 1/2) cell from the lower left corner.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.poses import wrap


@dataclass(frozen=True)
class PoseGrid:
    """Sizes and place of the lattice.

    Attributes:
        headings, rows, columns: number of bins on each axis.
        cell_m: side of a square cell, metres.
        left_m, bottom_m: site coordinates of the outer lower left corner.
    """

    headings: int
    rows: int
    columns: int
    cell_m: float
    left_m: float
    bottom_m: float

    @property
    def shape(self) -> tuple[int, int, int]:
        return self.headings, self.rows, self.columns

    @property
    def heading_step_rad(self) -> float:
        return 2 * np.pi / self.headings

    def heading_centres(self) -> NDArray[np.float64]:
        """[headings] radians in [-pi, pi)."""
        return wrap(np.arange(self.headings) * self.heading_step_rad)

    def x_centres(self) -> NDArray[np.float64]:
        """[columns] metres."""
        return self.left_m + (np.arange(self.columns, dtype=float) + 0.5) * self.cell_m

    def y_centres(self) -> NDArray[np.float64]:
        """[rows] metres."""
        return self.bottom_m + (np.arange(self.rows, dtype=float) + 0.5) * self.cell_m

    def cell_of(self, x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Row and column that hold a point (may lie outside the lattice)."""
        column = np.floor((np.asarray(x, dtype=float) - self.left_m) / self.cell_m)
        row = np.floor((np.asarray(y, dtype=float) - self.bottom_m) / self.cell_m)
        return row.astype(np.int64), column.astype(np.int64)

    def heading_of(self, heading: ArrayLike) -> NDArray[np.int64]:
        """Nearest heading bin of an angle in radians."""
        bins = np.rint(np.asarray(heading, dtype=float) / self.heading_step_rad)
        return bins.astype(np.int64) % self.headings

"""The part of a belief that is not zero: a window of the lattice, all headings.

A robot that knows where it is believes in a few square metres; moving and weighing those alone is what
makes a step cheap.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid

Floats = NDArray[np.float32]


class Part(NamedTuple):
    """A window of the belief, outside of which it is zero.

    Attributes:
        planes: [h r c] probabilities.
        row, column: of the lattice's cell at the window's first row and column.
    """

    planes: Floats
    row: int
    column: int

    @property
    def window(self) -> tuple[slice, slice]:
        """Rows and columns of the lattice it covers."""
        rows, columns = self.planes.shape[1:]
        return slice(self.row, self.row + rows), slice(self.column, self.column + columns)

    def grown(self, rows: int, columns: int, grid: PoseGrid) -> Part:
        """The same belief in a window with so much more room on every side, inside the lattice."""
        (top, bottom), (left, right) = (
            (max(0, at.start - more), min(size, at.stop + more))
            for at, more, size in zip(self.window, (rows, columns), grid.shape[1:], strict=True)
        )
        planes = np.zeros((grid.headings, bottom - top, right - left), np.float32)
        inside = Part(planes, top, left)
        inside.planes[
            :,
            self.row - top : self.row - top + self.planes.shape[1],
            self.column - left : self.column - left + self.planes.shape[2],
        ] = self.planes
        return inside

    def cropped(self, kept: NDArray[np.bool_]) -> Part:
        """The smallest window around the cells `kept` [r c] of this one; at least one of them."""
        rows, columns = np.flatnonzero(kept.any(axis=1)), np.flatnonzero(kept.any(axis=0))
        planes = self.planes[:, rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
        return Part(planes, self.row + int(rows[0]), self.column + int(columns[0]))

    def lattice(self, grid: PoseGrid) -> PoseGrid:
        """The window as a lattice of its own."""
        _, rows, columns = self.planes.shape
        left_m = grid.left_m + self.column * grid.cell_m
        bottom_m = grid.bottom_m + self.row * grid.cell_m
        return PoseGrid(grid.headings, rows, columns, grid.cell_m, left_m, bottom_m)

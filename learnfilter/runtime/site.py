"""What the plan predicts at every live cell, as a bundle carries it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import BundleError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.runtime.arrays import Arrays


@dataclass(frozen=True, eq=False)
class RobotSite:
    """Rings and distances on one lattice.

    Attributes:
        grid: the lattice.
        layout: how strips lie on rings.
        cells: [n 2] row, column of each live cell.
        range_m: [n p] expected range along each ring bearing; inf where nothing is within reach.
        unsure: [n p] no range evidence there.
        finish: [n p] finish of what the ray meets, -1 unknown.
        palette: [f 3] linear RGB of each finish.
        field_m: [rows*s columns*s] distance of sub-cell centres to the nearest surface.
        field_scale: s, sub-cells a cell side.
    """

    grid: PoseGrid
    layout: RingLayout
    cells: NDArray[np.int64]
    range_m: NDArray[np.float32]
    unsure: NDArray[np.bool_]
    finish: NDArray[np.int16]
    palette: NDArray[np.float32]
    field_m: NDArray[np.float32]
    field_scale: int

    @property
    def live(self) -> NDArray[np.bool_]:
        """[rows columns] whether a cell is live."""
        live = np.zeros(self.grid.shape[1:], dtype=bool)
        live[self.cells[:, 0], self.cells[:, 1]] = True
        return live


def read_site(grid: PoseGrid, layout: RingLayout, field_scale: int, arrays: Arrays) -> RobotSite:
    """Take a site out of its file's arrays.

    Raises:
        BundleError: shapes contradict the manifest or each other, or an index points nowhere.
    """
    cells = arrays.take("cells", None, 2, dtype=np.int64)
    rings = len(cells), layout.bearings
    site = RobotSite(
        grid,
        layout,
        cells,
        arrays.take("range_m", *rings, finite=False),
        arrays.take("unsure", *rings, dtype=np.bool_),
        arrays.take("finish", *rings, dtype=np.int16),
        arrays.take("palette", None, 3),
        arrays.take("field_m", grid.rows * field_scale, grid.columns * field_scale),
        field_scale,
    )
    arrays.none_left()
    inside = (cells >= 0).all() and (cells < grid.shape[1:]).all()
    _hold(inside and site.live.sum() == len(cells) > 0, arrays, "cells", "different cells of the grid")
    known = (site.finish >= -1).all() and (site.finish < len(site.palette)).all()
    _hold(known, arrays, "finish", f"-1 to {len(site.palette) - 1}")
    for name, values in (("range_m", site.range_m), ("palette", site.palette), ("field_m", site.field_m)):
        _hold((values >= 0).all(), arrays, name, "values not below 0")
    return site


def _hold(good: bool | np.bool_, arrays: Arrays, place: str, expected: str) -> None:
    if not good:
        raise BundleError("out of range", file=arrays.file, place=place, expected=expected)

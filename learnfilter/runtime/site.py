"""What the plan predicts at every live cell, as a bundle carries it.

`site.safetensors` keeps rings small: `cells` [n 2], row by row; `range_code` [n p] (uint16, or uint8 where
the bundle is int8), see `range_table`; `unsure` [n ceil(p/8)], bits of a ring's bearings, the first in the
highest bit of its byte; `finish` [n p] (uint8 with 255 for unknown, or int16 with -1 where there are more
than 255 finishes); `palette` [f 3]; and, only for a model that reads distances, `field_code` uint16
[rows*s columns*s] in steps of the manifest's `field_step_m`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import BundleError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.runtime.arrays import Arrays

UNKNOWN_FINISH = 255  # of a plan with few enough finishes for a byte each


@dataclass(frozen=True, eq=False)
class RobotSite:
    """Rings and distances on one lattice.

    Attributes:
        grid: the lattice.
        layout: how strips lie on rings.
        cells: [n 2] row, column of each live cell, row by row.
        range_m: [n p] expected range along each ring bearing; inf where nothing is within reach.
        unsure: [n p] no range evidence there.
        finish: [n p] finish of what the ray meets, -1 unknown.
        palette: [f 3] linear RGB of each finish.
        field_m: [rows*s columns*s] distance of sub-cell centres to the nearest surface; None where the model
            reads none.
        field_scale: s, sub-cells a cell side.
    """

    grid: PoseGrid
    layout: RingLayout
    cells: NDArray[np.int64]
    range_m: NDArray[np.float32]
    unsure: NDArray[np.bool_]
    finish: NDArray[np.int16]
    palette: NDArray[np.float32]
    field_m: NDArray[np.float32] | None
    field_scale: int

    @property
    def live(self) -> NDArray[np.bool_]:
        """[rows columns] whether a cell is live."""
        live = np.zeros(self.grid.shape[1:], dtype=bool)
        live[self.cells[:, 0], self.cells[:, 1]] = True
        return live


def reads_field(model: Mapping[str, Any]) -> bool:
    """Whether the model that a manifest's member `model` describes reads distances to surfaces."""
    ((kind, facts),) = model.items()
    parts = facts.get("parts", {}).values()
    return kind == "endpoint" or any(reads_field(part["model"]) for part in parts)


def range_table(top: int, range_max_m: float) -> NDArray[np.float32]:
    """[top + 1] metres that each range code stands for.

    Code c is range_max_m (c / (top - 1))^2, for an error that grows with range as a sensor's does; `top`, the
    largest number its type holds, says that nothing is within reach.
    """
    metres = range_max_m * (np.arange(top + 1) / (top - 1)) ** 2
    metres[top] = np.inf
    return metres.astype(np.float32)


def read_site(
    grid: PoseGrid, layout: RingLayout, facts: Mapping[str, Any], with_field: bool, arrays: Arrays
) -> RobotSite:
    """Take a site out of its file's arrays.

    Args:
        grid: the lattice.
        layout: how strips lie on rings.
        facts: the manifest's member `site`.
        with_field: whether there are distances too, see `reads_field`.
        arrays: of the file.

    Raises:
        BundleError: shapes contradict the manifest or each other, or an index points nowhere.
    """
    cells = arrays.take("cells", None, 2, dtype=np.int64)
    rings, scale = (len(cells), layout.bearings), facts["field_scale"]
    code = arrays.take("range_code", *rings, dtype=None)
    _hold(code.dtype in (np.uint8, np.uint16), arrays, "range_code", "uint8 or uint16")
    bits = arrays.take("unsure", len(cells), -(-layout.bearings // 8), dtype=None)
    _hold(bits.dtype == np.uint8, arrays, "unsure", "uint8")
    finish = arrays.take("finish", *rings, dtype=None)
    _hold(finish.dtype in (np.uint8, np.int16), arrays, "finish", "uint8 or int16")
    field_m = None
    if with_field:
        steps = arrays.take("field_code", grid.rows * scale, grid.columns * scale, dtype=np.uint16)
        field_m = steps * np.float32(facts["field_step_m"])
    site = RobotSite(
        grid,
        layout,
        cells,
        range_table(np.iinfo(code.dtype).max, facts["range_max_m"])[code],
        np.unpackbits(bits, axis=-1, count=layout.bearings).astype(bool),
        _finish_numbers(finish),
        arrays.take("palette", None, 3),
        field_m,
        scale,
    )
    arrays.none_left()
    inside = (cells >= 0).all() and (cells < grid.shape[1:]).all()
    rising = (np.diff(cells @ [grid.columns, 1]) > 0).all()  # weighing takes them out of planes in this order
    _hold(inside and rising and len(cells) > 0, arrays, "cells", "cells of the grid, row by row, none twice")
    known = (site.finish >= -1).all() and (site.finish < len(site.palette)).all()
    _hold(known, arrays, "finish", f"{len(site.palette)} finishes or unknown")
    _hold((site.palette >= 0).all(), arrays, "palette", "values not below 0")
    return site


def _finish_numbers(stored: NDArray[Any]) -> NDArray[np.int16]:
    numbers = stored.astype(np.int16)
    if stored.dtype == np.uint8:
        numbers[stored == UNKNOWN_FINISH] = -1
    return numbers


def _hold(good: bool | np.bool_, arrays: Arrays, place: str, expected: str) -> None:
    if not good:
        raise BundleError("out of range", file=arrays.file, place=place, expected=expected)

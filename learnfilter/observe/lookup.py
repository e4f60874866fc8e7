"""Sum table entries along rings and end points: the inner loops of the analytic models.

Rings are read in place with a wrapped index, so turning costs nothing and no [poses x columns] array
is ever made.  Nothing here is differentiable: analytic models have no weights inside the sum.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from learnfilter.core.strip import RingLayout


@numba.njit(cache=True, parallel=True, fastmath=True)
def sum_along_rings(table, ring, first, per_heading, headings):
    """out[b, n, h] = sum over w of table[b, w, ring[n, (h per_heading + first + w) mod p]].

    Args:
        table: [b w e] float32 evidence of each strip position for each expected class.
        ring: [n p] integer class of each ring bearing.
        first: ring bearing of strip position 0 at heading bin 0.
        per_heading: ring bearings a heading bin.
        headings: number of heading bins.
    """
    strips, columns, _ = table.shape
    cells, bearings = ring.shape
    out = np.zeros((strips, cells, headings), np.float32)
    for n in numba.prange(cells):
        wrapped = np.empty(bearings + columns, ring.dtype)
        for p in range(bearings + columns):
            wrapped[p] = ring[n, p % bearings]
        for b in range(strips):
            for h in range(headings):
                start = (h * per_heading + first) % bearings
                total = np.float32(0)
                for w in range(columns):
                    total += table[b, w, wrapped[start + w]]
                out[b, n, h] = total
    return out


@numba.njit(cache=True, parallel=True, fastmath=True)
def sum_at_end_points(end_row, end_column, used, table, field, cell_row, cell_column):
    """out[b, n, h] = sum over used w of table[distance class where column w ends].

    Args:
        end_row, end_column: [b h w] sub-cell of each end point, from `core.strip.end_offsets`.
        used: [b w] whether the column gives evidence.
        table: [d] evidence of each distance class; the last serves everything off the field.
        field: [rows columns] integer distance class of each sub-cell.
        cell_row, cell_column: [n] lower left sub-cell of each cell.
    """
    strips, headings, columns = end_row.shape
    rows, width = field.shape
    out = np.zeros((strips, len(cell_row), headings), np.float32)
    for n in numba.prange(len(cell_row)):
        for b in range(strips):
            for h in range(headings):
                total = np.float32(0)
                for w in range(columns):
                    if used[b, w]:
                        row, column = cell_row[n] + end_row[b, h, w], cell_column[n] + end_column[b, h, w]
                        if 0 <= row < rows and 0 <= column < width:
                            total += table[field[row, column]]
                        else:
                            total += table[len(table) - 1]
                out[b, n, h] = total
    return out


def ring_steps(layout: RingLayout) -> tuple[int, int, int]:
    """first, bearings a look and number of looks: the last arguments of `sum_along_rings`."""
    fine = layout.finer()
    return fine.first, fine.bearings_per_heading, fine.bearings // fine.bearings_per_heading


def smallest_integer(ring: NDArray, classes: int) -> NDArray:
    """The ring in the narrowest unsigned type that holds `classes`: the loop is bound by memory."""
    return np.ascontiguousarray(ring.astype(np.uint8 if classes <= 256 else np.uint16))

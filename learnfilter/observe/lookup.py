"""Sum table entries along rings and end points: the inner loops of the analytic models.

Rings are read in place with a wrapped index, so turning costs nothing and no [poses x columns] array
is ever made.  Nothing here is differentiable: analytic models have no weights inside the sum.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray


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
def sum_at_end_points(ranges, bearings, table, field, cell_x, cell_y, headings, sub_m):
    """out[b, n, h] = sum over w of table[distance class at the end point of column w].

    Args:
        ranges: [b w] metres, NaN or negative where the column gives no evidence.
        bearings: [w] sensor-frame bearing, radians.
        table: [d] evidence of each distance class; the last serves everything off the field.
        field: [rows columns] integer distance class of each sub-cell.
        cell_x, cell_y: [n] cell centres measured from the field's lower left corner, metres.
        headings: [h] radians.
        sub_m: side of a sub-cell, metres.
    """
    strips, columns = ranges.shape
    rows, width = field.shape
    out = np.zeros((strips, len(cell_x), len(headings)), np.float32)
    for b in range(strips):
        dx = np.empty((len(headings), columns), np.float32)
        dy = np.empty((len(headings), columns), np.float32)
        used = np.empty(columns, np.bool_)
        for w in range(columns):
            used[w] = ranges[b, w] >= 0
            for h in range(len(headings)):
                dx[h, w] = ranges[b, w] * np.cos(headings[h] + bearings[w]) if used[w] else 0.0
                dy[h, w] = ranges[b, w] * np.sin(headings[h] + bearings[w]) if used[w] else 0.0
        for n in numba.prange(len(cell_x)):
            for h in range(len(headings)):
                total = np.float32(0)
                for w in range(columns):
                    if used[w]:
                        column = int(np.floor((cell_x[n] + dx[h, w]) / sub_m))
                        row = int(np.floor((cell_y[n] + dy[h, w]) / sub_m))
                        if 0 <= row < rows and 0 <= column < width:
                            total += table[field[row, column]]
                        else:
                            total += table[len(table) - 1]
                out[b, n, h] = total
    return out


def smallest_integer(ring: NDArray, classes: int) -> NDArray:
    """The ring in the narrowest unsigned type that holds `classes`: the loop is bound by memory."""
    return np.ascontiguousarray(ring.astype(np.uint8 if classes <= 256 else np.uint16))

"""The mean of a likelihood over each cell, from its values at the centres."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

SIDE = np.float32(1 / 8)  # weight of the cell on either side


def over_cells(
    log_likelihood: NDArray[np.float32], cells: NDArray[np.int64], live: NDArray[np.bool_]
) -> NDArray[np.float32]:
    """[h n] log of the mean likelihood over each live cell.

    Between centres the likelihood is taken to be linear: 3/4 of a centre and 1/8 of either neighbour, row by
    row and column by column; where a neighbour is not live the others stand for it.

    Args:
        log_likelihood: [h n] nats at the centres of live cells.
        cells: [n 2] row, column of each.
        live: [r c] whether a cell is live.
    """
    rows, columns = cells.T
    peak = log_likelihood.max()
    planes = np.zeros((len(log_likelihood), *live.shape), np.float32)
    planes[:, rows, columns] = np.exp(log_likelihood - peak)
    mean = _beside(planes)[:, rows, columns] / np.maximum(_beside(live)[rows, columns], SIDE**2)
    return np.log(np.maximum(mean, np.finfo(np.float32).tiny)) + peak


def _beside(planes: NDArray[Any]) -> NDArray[np.float32]:
    """Each cell of planes [... r c] averaged with its neighbours; nothing beyond the edges."""
    by_column = (1 - 2 * SIDE) * planes
    by_column[..., 1:] += SIDE * planes[..., :-1]
    by_column[..., :-1] += SIDE * planes[..., 1:]
    out = (1 - 2 * SIDE) * by_column
    out[..., 1:, :] += SIDE * by_column[..., :-1, :]
    out[..., :-1, :] += SIDE * by_column[..., 1:, :]
    return out

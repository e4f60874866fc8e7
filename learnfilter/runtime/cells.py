"""The mean of a likelihood over each cell, from its values at the centres."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

SIDE = np.float32(1 / 8)  # weight of the cell on either side


def over_cells(planes: NDArray[np.float32], known: NDArray[np.bool_]) -> NDArray[np.float32]:
    """[h r c] mean likelihood over each cell.

    Between centres the likelihood is taken to be linear: 3/4 of a centre and 1/8 of either neighbour, row by
    row and column by column; where a neighbour is not known the others stand for it.

    Args:
        planes: [h r c] likelihood at the centres; zero where it is not known.
        known: [r c].
    """
    mean = beside(planes)
    mean *= known / np.maximum(beside(known), SIDE**2)
    return mean


def beside(planes: NDArray[Any]) -> NDArray[np.float32]:
    """Each cell of planes [... r c] averaged with its neighbours; nothing beyond the edges."""
    by_column = (1 - 2 * SIDE) * planes
    by_column[..., 1:] += SIDE * planes[..., :-1]
    by_column[..., :-1] += SIDE * planes[..., 1:]
    out = (1 - 2 * SIDE) * by_column
    out[..., 1:, :] += SIDE * by_column[..., :-1, :]
    out[..., :-1, :] += SIDE * by_column[..., 1:, :]
    return out

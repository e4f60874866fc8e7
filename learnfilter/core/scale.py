"""Nodes on the range axis, spaced more widely the farther away, and hat weights between them.

Node i stands at first (e^(growth i) - 1) / growth metres: spacing `first` at zero, growing by
`growth` a node.  Everything that tabulates range (likelihood tables, the matcher's features, the
robot's runtime) uses this one scale, so a table means the same everywhere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True)
class RangeScale:
    """A growing lattice on [0, max_range_m].

    Attributes:
        first_m: spacing of the nodes at zero, metres.
        growth: relative growth of the spacing from node to node; > 0.
        max_range_m: the last node is the first one at or beyond this.
    """

    first_m: float
    growth: float
    max_range_m: float

    @property
    def nodes(self) -> int:
        """Number of nodes."""
        return int(np.ceil(self.position(self.max_range_m) - 1e-9)) + 1

    def position(self, range_m: ArrayLike) -> NDArray[np.float64]:
        """Fractional node number of a range."""
        return np.log1p(self.growth * np.asarray(range_m, dtype=float) / self.first_m) / self.growth

    def range_at(self, position: ArrayLike) -> NDArray[np.float64]:
        """Range in metres at a fractional node number."""
        return self.first_m * np.expm1(self.growth * np.asarray(position, dtype=float)) / self.growth

    def hats(self, range_m: ArrayLike) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Lower node and the weight of the node above it, for linear interpolation.

        Ranges beyond the last node (inf too) are clamped to it; NaN is the caller's to mask.
        """
        clamped = np.clip(np.nan_to_num(np.asarray(range_m, dtype=float), nan=0.0), 0.0, self.max_range_m)
        position = self.position(clamped)
        lower = np.minimum(np.floor(position).astype(np.int64), self.nodes - 2)
        return lower, np.minimum(position - lower, 1.0)

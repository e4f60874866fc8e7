"""The few layers a bundle's network is made of, and how a strip is laid among ring bearings."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.strip import RingLayout
from learnfilter.runtime.arrays import Arrays

Floats = NDArray[np.float32]


class LayerShape(NamedTuple):
    """One layer as the manifest lists it.

    Attributes:
        name: prefix of its arrays, `<name>.weight` [outputs inputs kernel] and `<name>.bias` [outputs].
        inputs, outputs: channels.
        kernel: bearings it sees at once, odd.
        edges: 'zero' or 'circular', what lies beyond the first and last bearing.
        then: 'relu' or 'none'.
    """

    name: str
    inputs: int
    outputs: int
    kernel: int
    edges: str
    then: str


class Layer:
    """A layer with its weights."""

    def __init__(self, shape: LayerShape, arrays: Arrays):
        self.shape = shape
        self.weight = arrays.take(f"{shape.name}.weight", shape.outputs, shape.inputs, shape.kernel)
        self.bias = arrays.take(f"{shape.name}.bias", shape.outputs)

    def __call__(self, x: Floats) -> Floats:
        """[n l outputs] from [n l inputs]."""
        length, margin = x.shape[1], self.shape.kernel // 2
        edges: Any = "wrap" if self.shape.edges == "circular" else "constant"
        padded = np.pad(x, ((0, 0), (margin, margin), (0, 0)), mode=edges)
        taps = (padded[:, k : k + length] @ self.weight[:, :, k].T for k in range(self.shape.kernel))
        out = sum(taps, start=self.bias)
        return np.maximum(out, 0.0) if self.shape.then == "relu" else out


def place(rows: Floats, layout: RingLayout) -> Floats:
    """[p k h]: rows [w k] of a strip at the ring bearings it looks at under each heading, zero elsewhere.

    Rolling the strip, which is small, instead of every ring makes the scores of all poses one product.
    """
    headings = layout.bearings // layout.bearings_per_heading
    turned = np.arange(headings)
    looks_at = np.arange(layout.columns)[:, None] + layout.first + turned * layout.bearings_per_heading
    placed = np.zeros((layout.bearings, rows.shape[1], headings), np.float32)
    placed[looks_at % layout.bearings, :, turned] = rows[:, None, :]
    return placed

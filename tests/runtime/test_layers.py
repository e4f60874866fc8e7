"""Layers against torch, and strips among ring bearings against plain loops."""

from pathlib import Path

import numpy as np
import pytest
import torch
from torch.nn import functional as F

from learnfilter.core.strip import RingLayout
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.layers import Layer, LayerShape, place

ROUNDING = 1e-5  # float32 sums of 35 products near one


def layer(shape: LayerShape, weight: np.ndarray, bias: np.ndarray) -> Layer:
    return Layer(shape, Arrays(Path("weights"), {"a.weight": weight, "a.bias": bias}))


@pytest.mark.parametrize(("edges", "mode"), [("zero", "constant"), ("circular", "circular")])
@pytest.mark.parametrize("kernel", [1, 3, 5])
@pytest.mark.parametrize("then", ["relu", "none"])
def test_a_layer_is_torchs_convolution(edges, mode, kernel, then):
    """Same weights, same edges, same answer."""
    rng = np.random.default_rng(0)
    x, weight, bias = (rng.normal(size=s).astype(np.float32) for s in ((2, 12, 7), (4, 7, kernel), (4,)))
    padded = F.pad(torch.tensor(x).transpose(1, 2), (kernel // 2, kernel // 2), mode=mode)
    expected = F.conv1d(padded, torch.tensor(weight), torch.tensor(bias)).transpose(1, 2)
    expected = torch.relu(expected) if then == "relu" else expected
    found = layer(LayerShape("a", 7, 4, kernel, edges, then), weight, bias)(x)
    np.testing.assert_allclose(found, expected.numpy(), atol=ROUNDING)


@pytest.mark.parametrize("first", [-3, 0, 7])
def test_a_placed_strip_looks_where_the_layout_says(first):
    """Position w at heading h looks along ring bearing (h K + first + w) mod P."""
    rows = np.random.default_rng(1).normal(size=(5, 2)).astype(np.float32)
    expected = np.zeros((12, 2, 4), np.float32)
    for h in range(4):
        for w in range(5):
            expected[(h * 3 + first + w) % 12, :, h] = rows[w]
    np.testing.assert_array_equal(place(rows, RingLayout(12, 3, 0.0, first, (0, 1, 2, 3, 4))), expected)

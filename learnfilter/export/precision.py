"""Weights in fewer bits.

int8: symmetric, each output channel of a layer and each column of a table under a scale of its own
(Krishnamoorthi 2018).  Rounding is to the nearest; the scale is calibrated: of CLIPS shares of the channel's
largest weight, the one whose clipping and rounding give the least summed squared error of what the channel
puts out on calibration inputs, e' M e with e the error of its weights and M the second moments of its
inputs.  A table is read entry by entry, so there it is the squared error of its entries.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor, nn

from learnfilter.drives.drive import Drive
from learnfilter.filtering.rollout import lay_strips
from learnfilter.observe.contract import ObservationModel
from learnfilter.render.site import Site
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.bundle import WEIGHTS

Named = Mapping[str, NDArray[Any]]
Moments = Mapping[str, NDArray[np.float64]]

CLIPS = np.geomspace(1.0, 0.1, 24)
LARGEST = 127  # of a byte; -128 stays unused, so that zero stays zero and signs are alike
# Cells and strips that calibrate: each gives a hundred bearings and more, for a few thousand weights.
CALIBRATION_CELLS, CALIBRATION_STRIPS = 256, 64


def stored(arrays: Named, precision: str, moments: Moments) -> dict[str, NDArray[Any]]:
    """Arrays as `weights.safetensors` holds them.

    Args:
        arrays: name -> floats; of three axes those of a layer [outputs inputs kernel], of two a table.
        precision: one of `runtime.bundle.PRECISIONS`.
        moments: of layers' inputs, see `input_moments`.
    """
    if precision != "int8":
        kind = np.float16 if precision == "fp16" else np.float32
        return {name: array.astype(kind) for name, array in arrays.items()}
    small: dict[str, NDArray[Any]] = {}
    for name, array in arrays.items():
        if array.ndim < 2:
            small[name] = array.astype(np.float32)
        elif array.ndim == 2:
            codes, scales = quantised(array.T, None)
            small[name], small[f"{name}.scale"] = np.ascontiguousarray(codes.T), scales[None]
        else:
            codes, scales = quantised(array.reshape(len(array), -1), moments[name])
            small[name], small[f"{name}.scale"] = codes.reshape(array.shape), scales[:, None, None]
    return small


def restored(weights: Named) -> dict[str, NDArray[np.float32]]:
    """The floats that stored arrays stand for, by the robot's own reader."""
    arrays = Arrays(Path(WEIGHTS), weights)
    names = [name for name in weights if not name.endswith(".scale")]
    return {name: arrays.take(name, *weights[name].shape) for name in names}


def quantised(
    rows: NDArray[np.floating], moment: NDArray[np.float64] | None
) -> tuple[NDArray[np.int8], NDArray[np.float32]]:
    """Codes [c m] and scales [c] of rows of weights [c m], rows ~ codes x scales.

    Args:
        rows: a channel each.
        moment: [m m] second moments of what the weights are multiplied with; None where all count alike.
    """
    largest = np.abs(rows).max(axis=1)
    largest = np.where(largest > 0, largest, 1.0)  # a silent channel is silent under any scale
    scales, least = largest / LARGEST, np.full(len(rows), np.inf)
    for clip in CLIPS:
        tried = clip * largest / LARGEST
        off = _codes(rows, tried) * tried[:, None] - rows
        error = ((off if moment is None else off @ moment) * off).sum(axis=1)
        scales, least = np.where(error < least, tried, scales), np.minimum(error, least)
    kept = scales.astype(np.float32)
    return _codes(rows, kept).astype(np.int8), kept


def _codes(rows: NDArray[np.floating], scales: NDArray[np.floating]) -> NDArray[np.floating]:
    return np.rint(rows / scales[:, None]).clip(-LARGEST, LARGEST)


@torch.no_grad()
def input_moments(model: ObservationModel, site: Site, drive: Drive) -> dict[str, NDArray[np.float64]]:
    """Second moments of what each layer of a model takes in, on some rings of a site and strips of a drive.

    Returns:
        `<layer>.weight` -> [m m] with m = inputs x kernel, ordered as the weights are; empty for a model
        without layers.
    """
    few = site.cells[:: -(-site.n_cells // CALIBRATION_CELLS)]
    index = site.index_of()[few[:, 0], few[:, 1]]
    part = replace(
        site, cells=few, range_m=site.range_m[index], unsure=site.unsure[index], finish=site.finish[index]
    )
    rows = np.unique(np.linspace(0, len(drive) - 1, CALIBRATION_STRIPS).astype(int))
    with _watched(model) as moments:
        model.scores(lay_strips(drive, site.layout, rows), model.read(part))
    return moments


@contextmanager
def _watched(model: ObservationModel) -> Iterator[dict[str, NDArray[np.float64]]]:
    """Second moments by layer, summed while the model runs."""
    moments: dict[str, NDArray[np.float64]] = {}

    def watch(name: str, layer: nn.Module) -> Any:
        def add(layer: nn.Module, taken: tuple[Tensor]) -> None:
            rows = _windows(layer, taken[0]).double()
            moments[name] = moments.get(name, 0.0) + (rows.T @ rows).numpy()

        return layer.register_forward_pre_hook(add)

    layers = [(n, layer) for n, layer in model.named_modules() if isinstance(layer, nn.Conv1d | nn.Linear)]
    hooks = [watch(f"{name}.weight", layer) for name, layer in layers]
    try:
        yield moments
    finally:
        for hook in hooks:
            hook.remove()


def _windows(layer: nn.Module, x: Tensor) -> Tensor:
    """[positions inputs*kernel] what meets the weights at each position of a layer's input."""
    if isinstance(layer, nn.Conv1d):
        x = x.unfold(2, layer.kernel_size[0], 1).permute(0, 2, 1, 3).flatten(2)
    return x.flatten(0, -2)

"""Low-rank factors of the analytic evidence: what a matcher is born from.

Range: the log-ratio table is factored by a singular value decomposition weighted by how often each
reading and each expectation occurs (Eckart, Young 1936), and its normaliser is computed anew so that
masses still sum to one.  Colour: the kernel is factored on landmark colours (Williams, Seeger 2001).
Both are plain arrays, so that the robot's runtime can read the very same numbers.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.scale import RangeScale
from learnfilter.observe.colour import ColourFit, kernel
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.mixture import bin_masses, log_ratio_table


class RangeFactors(NamedTuple):
    """evidence(z, r) ~ measured[z] . expected[r] + bias[r].

    Attributes:
        measured: [nodes + 1, k]; the last row is 'nothing came back'.
        expected: [nodes + 2, k]; the last rows are 'nothing within reach' and 'unsure' (zero).
        bias: [nodes + 2] the normaliser; zero where unsure.
    """

    measured: NDArray[np.float64]
    expected: NDArray[np.float64]
    bias: NDArray[np.float64]


def factor_range(scale: RangeScale, fit: MixtureFit, rank: int) -> RangeFactors:
    """Factor the fitted mixture's log-ratio table to `rank` features."""
    table = log_ratio_table(scale, fit.mixture, fit.expected_weight)[:, :-1]
    expected = np.append(scale.range_at(np.arange(scale.nodes)).clip(0, scale.max_range_m), np.inf)
    weight_r = fit.expected_weight / fit.expected_weight.sum()
    weight_z = weight_r @ bin_masses(scale, expected, fit.mixture)
    root_z, root_r = np.sqrt(weight_z + 1e-4), np.sqrt(weight_r + 1e-4)
    left, size, right = np.linalg.svd(root_z[:, None] * table * root_r[None, :], full_matrices=False)
    rank = min(rank, len(size))
    measured = left[:, :rank] * np.sqrt(size[:rank]) / root_z[:, None]
    features = right[:rank].T * np.sqrt(size[:rank]) / root_r[:, None]
    bias = -np.log(weight_z @ np.exp(measured @ features.T))
    unsure = np.zeros((1, rank))
    return RangeFactors(measured, np.vstack([features, unsure]), np.append(bias, 0.0))


class ColourFactors(NamedTuple):
    """kernel(x, y) ~ feature(x) . feature(y), feature(x) = kernel(x, landmarks) @ root.

    Attributes:
        landmarks: [k 3] log colours.
        root: [k k] inverse square root of the landmarks' own kernel.
        background: [s k] features of the background sample, for normalisers.
    """

    landmarks: NDArray[np.float64]
    root: NDArray[np.float64]
    background: NDArray[np.float64]


def factor_colour(fit: ColourFit, finishes: NDArray[np.float64], rank: int) -> ColourFactors:
    """Choose landmarks among finishes and background (greedy, largest residual first) and factor.

    Args:
        fit: the fitted colour model.
        finishes: [f 3] log colours of finishes seen while fitting: where accuracy matters most.
        rank: number of landmarks.
    """
    candidates = np.vstack([finishes, fit.background])
    full = kernel(candidates, candidates, fit.spread)
    residual, chosen = np.diag(full).copy(), []
    residual[: len(finishes)] *= 4  # finishes stand for whole walls, background rows for one column
    rows = np.zeros((0, len(candidates)))
    for _ in range(min(rank, len(candidates))):
        pick = int(np.argmax(residual))
        row = full[pick] - rows[:, pick] @ rows
        rows = np.vstack([rows, row / np.sqrt(max(row[pick], 1e-9))])
        residual = np.maximum(residual - rows[-1] ** 2, 0.0)
        residual[pick] = 0.0
        chosen.append(pick)
    landmarks = candidates[chosen]
    values, vectors = np.linalg.eigh(kernel(landmarks, landmarks, fit.spread))
    root = vectors / np.sqrt(np.maximum(values, 1e-4)) @ vectors.T
    background = kernel(fit.background[:256], landmarks, fit.spread) @ root
    return ColourFactors(landmarks, root, background)

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
        landmarks: [l 3] log colours.
        root: [l k] from kernels at the landmarks to features.
        background: [s k] features of the background sample, for normalisers.
    """

    landmarks: NDArray[np.float64]
    root: NDArray[np.float64]
    background: NDArray[np.float64]


LANDMARKS = 48  # more than features: they cost a column some kernels, while features cost the whole table
FINISH_WEIGHT = 4.0  # a finish stands for whole walls, a background row for one column


def factor_colour(fit: ColourFit, finishes: NDArray[np.float64], rank: int) -> ColourFactors:
    """Factor the kernel to `rank` features, most accurate where finishes and background lie.

    The kernel is written on many landmarks first, then on the principal axes of what finishes and
    background look like there.

    Args:
        fit: the fitted colour model.
        finishes: [f 3] log colours of finishes seen while fitting: where accuracy matters most.
        rank: number of features.
    """
    candidates = np.vstack([finishes, fit.background])
    weight = np.ones(len(candidates))
    weight[: len(finishes)] = FINISH_WEIGHT * len(fit.background) / max(len(finishes), 1)
    landmarks = candidates[_spread_out(kernel(candidates, candidates, fit.spread), weight, LANDMARKS)]
    values, vectors = np.linalg.eigh(kernel(landmarks, landmarks, fit.spread))
    keep = values > 1e-8 * values[-1]
    whiten = vectors[:, keep] / np.sqrt(values[keep])
    features = kernel(candidates, landmarks, fit.spread) @ whiten
    _, axes = np.linalg.eigh(features.T @ (features * weight[:, None]))
    root = whiten @ axes[:, ::-1][:, :rank]
    background = kernel(fit.background[:256], landmarks, fit.spread) @ root
    return ColourFactors(landmarks, root, background)


def _spread_out(full: NDArray[np.float64], weight: NDArray[np.float64], count: int) -> list[int]:
    """Rows of a kernel [n n] picked one by one, each the one explained worst so far (pivoted Cholesky)."""
    residual, rows, chosen = np.diag(full).copy(), np.zeros((0, len(full))), []
    for _ in range(min(count, len(full))):
        pick = int(np.argmax(residual * weight))
        if residual[pick] < 1e-6:  # the rest is explained already
            break
        row = (full[pick] - rows[:, pick] @ rows) / np.sqrt(residual[pick])
        rows = np.vstack([rows, row])
        residual = np.maximum(residual - row**2, 0.0)
        residual[pick] = 0.0
        chosen.append(pick)
    return chosen

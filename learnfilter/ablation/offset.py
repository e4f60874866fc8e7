# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""The mean likelihood of a strip over the poses within a cell.

Each column is a mixture over shapes its ray can meet; the integral over offsets from the cell's centre
is Laplace's (Tierney and Kadane 1986) about the offset that reweighted Gauss-Newton steps find.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

# Steps taken, and how fast the doubt in an offset stops to soften columns: faster and far columns are
# lost on the way, slower and few columns do not get there.
ROUNDS, SOFTEN = 4, 0.25
# Shapes seen at a flatter angle than this cosine are passed by.
LEAST_COSINE = 0.01


class Mixture(NamedTuple):
    """Columns [w] by part [k]: share x N(range to the shape; noise), and what does not move."""

    depth: NDArray[np.float64]  # [w] true to scale
    ux: NDArray[np.float64]  # [w] direction from the cell's centre
    uy: NDArray[np.float64]
    share: NDArray[np.float64]
    noise: NDArray[np.float64]
    shape: NDArray[np.float64]  # [w k 3] normal and distance of a line, or centre and radius of a disc
    is_disc: NDArray[np.bool_]  # [w k]
    rest: NDArray[np.float64]  # [w]


@njit(cache=True)
def mean_over_cell(mixture, prior):
    """Log of the mean, over offsets drawn with variances `prior` [3], of the product of all columns."""
    offset, spread, grip, pull = np.zeros(3), np.diag(prior), np.empty((3, 3)), np.empty(3)
    work = np.empty((mixture.share.shape[1], 6))
    nats = 0.0
    for turn in range(ROUNDS + 1):
        # while the offset is being found its own doubt softens each column, ever less
        spread *= SOFTEN**turn if turn < ROUNDS - 1 else 0.0
        grip[:] = 0.0
        pull[:], nats = 0.0, 0.0
        for i in range(3):
            grip[i, i] = 1 / prior[i]
        for w in range(len(mixture.rest)):
            nats += _reweigh(mixture, w, offset, spread, grip, pull, work)
        det = _invert(grip, spread)
        if turn < ROUNDS:
            for i in range(3):
                offset[i] = spread[i, 0] * pull[0] + spread[i, 1] * pull[1] + spread[i, 2] * pull[2]
    for i in range(3):
        nats -= 0.5 * offset[i] * offset[i] / prior[i] + 0.5 * math.log(prior[i])
    return nats - 0.5 * math.log(det)


@njit(cache=True)
def _sight(mixture, w, k, offset, cos, sin, slope):
    """Range along a column from an offset to a part's shape, inf where it passes; sets its slope [3]."""
    ux = mixture.ux[w] * cos - mixture.uy[w] * sin
    uy = mixture.uy[w] * cos + mixture.ux[w] * sin
    nx, ny, size = mixture.shape[w, k]
    if mixture.is_disc[w, k]:
        x, y = nx - offset[0], ny - offset[1]
        off = y * ux - x * uy
        if off * off >= 0.999 * size * size:
            return np.inf
        reach = x * ux + y * uy - math.sqrt(size * size - off * off)
        nx, ny = (x - reach * ux) / size, (y - reach * uy) / size
        cosine = nx * ux + ny * uy
    else:
        cosine = nx * ux + ny * uy
        if cosine < LEAST_COSINE:
            return np.inf
        reach = (size - nx * offset[0] - ny * offset[1]) / cosine
    slope[0], slope[1], slope[2] = -nx / cosine, -ny / cosine, reach * (uy * nx - ux * ny) / cosine
    return reach


@njit(cache=True)
def _reweigh(mixture, w, offset, spread, grip, pull, work):
    """Log density of a column at an offset; adds to the normal equations what it says of the offset.

    work: [k 6] scratch.
    """
    cos, sin = math.cos(offset[2]), math.sin(offset[2])
    parts, total = mixture.share.shape[1], mixture.rest[w] + 1e-300
    for k in range(parts):
        work[k, 0] = 0.0
        if mixture.share[w, k] > 0:
            slope = work[k, 3:]
            error = mixture.depth[w] - _sight(mixture, w, k, offset, cos, sin, slope)
            a, b, c = slope
            variance = (
                mixture.noise[w, k] + a * a * spread[0, 0] + b * b * spread[1, 1] + c * c * spread[2, 2]
            )
            variance += 2 * (a * b * spread[0, 1] + a * c * spread[0, 2] + b * c * spread[1, 2])
            if error * error < 80 * variance:
                scale = mixture.share[w, k] / math.sqrt(2 * math.pi * variance)
                work[k, 0] = scale * math.exp(-0.5 * error * error / variance)
                work[k, 1] = error + a * offset[0] + b * offset[1] + c * offset[2]
                work[k, 2] = variance
                total += work[k, 0]
    for k in range(parts):
        if work[k, 0] > 1e-9 * total:
            weight = work[k, 0] / total / work[k, 2]
            for i in range(3):
                pulled = weight * work[k, 3 + i]
                pull[i] += pulled * work[k, 1]
                for j in range(3):
                    grip[i, j] += pulled * work[k, 3 + j]
    return math.log(total)


@njit(cache=True)
def _invert(a, out):
    """Inverse of a symmetric 3 x 3 matrix; returns its determinant."""
    out[0, 0] = a[1, 1] * a[2, 2] - a[1, 2] * a[1, 2]
    out[0, 1] = a[0, 2] * a[1, 2] - a[0, 1] * a[2, 2]
    out[0, 2] = a[0, 1] * a[1, 2] - a[0, 2] * a[1, 1]
    out[1, 1] = a[0, 0] * a[2, 2] - a[0, 2] * a[0, 2]
    out[1, 2] = a[0, 1] * a[0, 2] - a[0, 0] * a[1, 2]
    out[2, 2] = a[0, 0] * a[1, 1] - a[0, 1] * a[0, 1]
    det = a[0, 0] * out[0, 0] + a[0, 1] * out[0, 1] + a[0, 2] * out[0, 2]
    out[1, 0], out[2, 0], out[2, 1] = out[0, 1], out[0, 2], out[1, 2]
    out /= det
    return det

"""Carry a belief through one odometry reading, without torch.

The same step as `filtering/motion.py`, which explains it and which a change here must follow; a test
holds the two together.  Särkkä (2013), ch. 4, prediction step.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.part import Floats, Part

SOFTNESS = 0.01  # cells^2; how gently noise gives way to interpolation
LEAST_VARIANCE = 1e-6  # cells^2


@dataclass(frozen=True)
class MotionNoise:
    """Spread of odometry as standard deviations.

    Attributes:
        turn_from_turn: radians a radian turned.
        turn_from_travel: radians a metre travelled.
        travel_from_travel: metres a metre travelled (along and across alike).
        travel_from_turn: metres a radian turned.
    """

    turn_from_turn: float
    turn_from_travel: float
    travel_from_travel: float
    travel_from_turn: float

    def variances(self, odometry: NDArray[np.floating]) -> tuple[float, float]:
        """Variance of travel (metres squared, each axis) and of turn (radians squared) of a motion [3]."""
        travel, turn = float(odometry[0] ** 2 + odometry[1] ** 2), float(odometry[2] ** 2)
        return (
            self.travel_from_travel**2 * travel + self.travel_from_turn**2 * turn,
            self.turn_from_turn**2 * turn + self.turn_from_travel**2 * travel,
        )


class _Kernels(NamedTuple):
    """How one odometry reading moves each heading's plane: taps along rows and columns.

    Attributes:
        shift: [2 h] rows and columns moved, in cells.
        first: [2 h] offset of the first tap.
        weights: two of [h k], of the taps.
    """

    shift: NDArray[np.floating]
    first: NDArray[np.int64]
    weights: tuple[Floats, Floats]

    def reach(self) -> tuple[int, int]:
        """How many rows and columns mass can move."""
        ends = (
            (first, first + weights.shape[1] - 1)
            for first, weights in zip(self.first, self.weights, strict=True)
        )
        rows, columns = (int(max(np.abs(low).max(), np.abs(high).max())) for low, high in ends)
        return rows, columns


def predict(
    belief: Part, odometry: Floats, grid: PoseGrid, live: NDArray[np.bool_], noise: MotionNoise
) -> Part:
    """The belief after one odometry reading, p(pose_t | strips before t).

    Args:
        belief: probabilities, zero off the live cells.
        odometry: [3] forward_m, left_m, turn_rad of the sensor, in its previous frame.
        grid: the lattice.
        live: [r c] of the whole lattice.
        noise: of odometry.

    Returns:
        Probabilities summing to one; uniform over live poses where all mass was lost into walls.
    """
    travel_variance, turn_variance = noise.variances(odometry)
    kernels = _kernels(odometry, travel_variance, grid)
    room = belief.grown(*kernels.reach(), grid)
    moved, live_here = np.empty_like(room.planes), live[room.window]
    for h, plane in enumerate(room.planes):
        half = _shift(plane, kernels.first[0, h], kernels.weights[0][h])
        moved[h] = _shift(half.T, kernels.first[1, h], kernels.weights[1][h]).T
        moved[h] *= clear_path(live_here, float(kernels.shift[0, h]), float(kernels.shift[1, h]))
    kept = float(moved.sum(dtype=np.float64))
    if kept <= 1e-12:
        share = np.float32(1.0 / (np.count_nonzero(live) * grid.headings))
        return Part(np.broadcast_to(live * share, grid.shape), 0, 0)
    moved /= np.float32(kept)
    step = grid.heading_step_rad
    first, weights = _taps(np.array([odometry[2] / step]), np.array([turn_variance / step**2]))
    turned = (np.roll(moved, first[0] + k, axis=0) * weight for k, weight in enumerate(weights[0]))
    return room._replace(planes=sum(turned, start=np.zeros_like(moved)))


def _kernels(odometry: Floats, travel_variance: float, grid: PoseGrid) -> _Kernels:
    heading = grid.heading_centres().astype(np.float32)
    forward, left, _ = odometry
    shift_c = (forward * np.cos(heading) - left * np.sin(heading)) / np.float32(grid.cell_m)
    shift_r = (forward * np.sin(heading) + left * np.cos(heading)) / np.float32(grid.cell_m)
    across = (forward**2 + left**2) * grid.heading_step_rad**2 / 12 / grid.cell_m**2
    direction = np.arctan2(shift_r, shift_c)
    base = travel_variance / grid.cell_m**2
    first_r, weights_r = _taps(shift_r, base + across * np.cos(direction) ** 2)
    first_c, weights_c = _taps(shift_c, base + across * np.sin(direction) ** 2)
    return _Kernels(np.stack([shift_r, shift_c]), np.stack([first_r, first_c]), (weights_r, weights_c))


def _taps(mean: NDArray[np.floating], variance: NDArray[np.floating]) -> tuple[NDArray[np.int64], Floats]:
    """First offset [i] and weights [i k] of the taps that hold each kernel within 4 sigma."""
    reach = 1 + math.ceil(4.0 * math.sqrt(float(variance.max())))
    first = np.rint(mean) - reach
    # second differences in float32 are noise of 1e-7 where tails, and the filter's floor, are far smaller
    mean, variance = mean.astype(np.float64), variance.astype(np.float64)
    weights = shift_weights(mean, variance, first, 2 * reach + 1).clip(min=0)
    return first.astype(np.int64), (weights / weights.sum(axis=1, keepdims=True)).astype(np.float32)


def shift_weights(
    mean: NDArray[np.floating], variance: NDArray[np.floating], first: NDArray[np.floating], taps: int
) -> NDArray[np.float64]:
    """Weights [i k] of `taps` offsets from `first` [i], for shifts of mean and variance [i] in cells."""
    rest = variance - _interpolation_variance(mean, np.maximum(variance - 1 / 6, 0.0))
    spread = np.sqrt(SOFTNESS * np.logaddexp(0.0, rest / SOFTNESS) + LEAST_VARIANCE)[:, None]
    x = (first - mean)[:, None] + np.arange(-1, taps + 1)
    u = x / spread
    # integral of the normal distribution function, a smoothed max(x, 0); its second difference is a tap
    ramp = x * _normal_cdf(u) + spread * np.exp(-0.5 * u * u) / math.sqrt(2 * math.pi)
    return ramp[:, 2:] - 2 * ramp[:, 1:-1] + ramp[:, :-2]


def _interpolation_variance(
    mean: NDArray[np.floating], variance: NDArray[np.floating]
) -> NDArray[np.float64]:
    """Variance that linear interpolation adds to a Gaussian, cells^2 (first harmonics of f(1 - f))."""
    harmonics = (
        np.cos(2 * np.pi * n * mean) * np.exp(-2 * (np.pi * n) ** 2 * variance) / (np.pi * n) ** 2
        for n in (1, 2, 3)
    )
    return 1 / 6 - sum(harmonics, start=np.zeros_like(mean))


def _normal_cdf(u: NDArray[np.float64]) -> NDArray[np.float64]:
    """Distribution function of the standard normal; a handful of taps, so no vector library."""
    return np.array([0.5 * math.erfc(-v / math.sqrt(2)) for v in u.flat]).reshape(u.shape)


def _shift(plane: Floats, first: np.int64, weights: Floats) -> Floats:
    """Sum of weighted shifts of a plane along its first axis; what leaves it is lost."""
    out, size = np.zeros_like(plane), len(plane)
    for shift, weight in enumerate(weights, int(first)):
        low, high = max(0, shift), min(size, size + shift)
        if low < high:
            out[low:high] += weight * plane[low - shift : high - shift]
    return out


def clear_path(live: NDArray[np.bool_], shift_r: float, shift_c: float) -> NDArray[np.bool_]:
    """[r c] whether the straight way into each cell, back along a shift in cells, stays on live cells."""
    rows, columns = live.shape
    clear = live.copy()
    longest = max(abs(shift_r), abs(shift_c))
    for step in range(1, int(longest) + 1):
        r, c = round(shift_r * step / longest), round(shift_c * step / longest)
        behind = np.zeros_like(live)
        to_r, to_c = (slice(max(0, s), max(0, n + min(0, s))) for s, n in ((r, rows), (c, columns)))
        from_r, from_c = (slice(max(0, -s), max(0, n + min(0, -s))) for s, n in ((r, rows), (c, columns)))
        behind[to_r, to_c] = live[from_r, from_c]
        clear &= behind
    return clear

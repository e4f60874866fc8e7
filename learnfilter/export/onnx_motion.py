"""One odometry reading as a graph: `runtime/motion.py` computes the same, and a change there must come here.

Taps become one matrix a heading and axis, so that a shift by a length known only when the graph runs is a
matrix product.  ONNX Runtime has no erf in double precision: `normal_cdf` brings its own.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray
from scipy.special import erfcx

from learnfilter.core.grid import PoseGrid
from learnfilter.export.onnx_graph import F32, F64, I64, Value
from learnfilter.runtime.motion import LEAST_VARIANCE, SOFTNESS, MotionNoise

DEGREE = 24  # of the polynomial in `normal_cdf`: errs by 1e-15, one of 20 by 1e-13


def predict(belief: Value, odometry: Value, live: Value, grid: PoseGrid, noise: MotionNoise) -> Value:
    """The belief after one odometry reading.

    Args:
        belief: [h r c] probabilities, zero off the live cells.
        odometry: [3] forward_m, left_m, turn_rad of the sensor, in its previous frame.
        live: [r c].
        grid: the lattice.
        noise: of odometry.

    Returns:
        [h r c], summing to one; uniform over live poses where all mass was lost into walls.
    """
    forward, left, turn = (odometry.gather(axis) for axis in range(3))
    travel_variance, turn_variance = _variances(forward, left, turn, noise)
    heading, step = grid.heading_centres().astype(F32), grid.heading_step_rad
    # not left to the graph: the last bit may decide which cells are crossed
    east, north = np.cos(heading), np.sin(heading)
    shift_c = (forward * east - left * north) / F32(grid.cell_m)
    shift_r = (forward * north + left * east) / F32(grid.cell_m)
    base = travel_variance / grid.cell_m**2
    by_row, by_column = (
        # off its bin's centre a heading strays across the way: one axis widens with the other's shift
        _matrix(*_taps(shift, base + (other * other).cast(F64) * (step**2 / 12)), size)
        for shift, other, size in ((shift_r, shift_c, grid.rows), (shift_c, shift_r, grid.columns))
    )
    moved = (by_row @ belief @ by_column.moved(0, 2, 1)) * _clear_path(live, shift_r, shift_c, grid).cast(F32)
    kept, everywhere = moved.cast(F64).sum(), live.cast(F32)
    lost = kept <= 1e-12
    moved = lost.where(everywhere, moved)
    kept = lost.where(everywhere.cast(F64).sum() * grid.headings, kept)
    first, weights = _taps((turn / step).shaped(1), (turn_variance / step**2).shaped(1))
    turned = _roll(first, weights, grid.headings) @ (moved / kept.cast(F32)).shaped(grid.headings, -1)
    return turned.shaped(*grid.shape)


def _variances(forward: Value, left: Value, turn: Value, noise: MotionNoise) -> tuple[Value, Value]:
    """Of travel (metres squared) and turn (radians squared), see `MotionNoise.variances`."""
    travel, turned = (forward * forward + left * left).cast(F64), (turn * turn).cast(F64)
    return (
        travel * noise.travel_from_travel**2 + turned * noise.travel_from_turn**2,
        turned * noise.turn_from_turn**2 + travel * noise.turn_from_travel**2,
    )


def _taps(mean: Value, variance: Value) -> tuple[Value, Value]:
    """First offset [i] and weights [i k] of the taps that hold each kernel within 4 sigma."""
    reach = (variance.max().sqrt() * 4.0).op("Ceil").cast(I64) + 1
    first = mean.rounded().cast(I64) - reach
    offsets = first.spread(1) + mean.graph.counted(reach * 2 + 1)
    weights = _shift_weights(mean.cast(F64), variance, offsets.cast(F64)).at_least(0.0)
    return first, (weights / weights.sum(1, keep=True)).cast(F32)


def _shift_weights(mean: Value, variance: Value, offsets: Value) -> Value:
    """Weights [i k] of integer offsets [i k] for shifts of `mean` cells [i] with `variance` cells^2 [i]."""
    rest = (variance - _interpolation_variance(mean, (variance - 1 / 6).at_least(0.0))) / SOFTNESS
    softly = rest.at_least(0.0) + (1.0 + (0.0 - rest.absolute()).exp()).log()
    spread = (softly * SOFTNESS + LEAST_VARIANCE).sqrt().spread(1)
    x = (offsets - mean.spread(1)) + np.array([1.0, 0.0, -1.0])[:, None, None]
    u = x / spread
    ramp = x * normal_cdf(u) + spread * (u * u * -0.5).exp() / math.sqrt(2 * math.pi)
    return (ramp * np.array([1.0, -2.0, 1.0])[:, None, None]).sum(0)


def _interpolation_variance(mean: Value, variance: Value) -> Value:
    """Variance that linear interpolation adds to a Gaussian, cells^2 (first harmonics of f(1 - f))."""
    n = np.array([[1.0], [2.0], [3.0]])
    harmonics = (mean * (2 * np.pi * n)).op("Cos") * (variance * (-2 * (np.pi * n) ** 2)).exp()
    return 1 / 6 - (harmonics / (np.pi * n) ** 2).sum(0)


def normal_cdf(u: Value) -> Value:
    """Distribution function of the standard normal.

    erfc(z) = t exp(-z^2 + P(t)) with t = 2 / (2 + z) and P a polynomial (form: Press et al. 2007, Numerical
    Recipes, 6.2.2), here in y = 2 t - 1.
    """
    z = u.absolute() / math.sqrt(2)
    y = (2.0 - z) / (2.0 + z)
    power = y.spread(-1).op("Pow", np.arange(DEGREE + 1.0)) @ _erfc_polynomial()
    tail = (y + 1.0) * (power - z * z).exp() / 4.0
    return (u < 0.0).where(tail, 1.0 - tail)


def _erfc_polynomial() -> NDArray[np.floating]:
    """Coefficients of P, lowest power first."""
    y = chebyshev.chebpts1(DEGREE + 1)
    t = (y + 1) / 2
    return chebyshev.cheb2poly(chebyshev.chebfit(y, np.log(erfcx(2 / t - 2) / t), DEGREE))


def _matrix(first: Value, weights: Value, size: int) -> Value:
    """[i to from] the taps [i k] as matrices; what leaves the axis is lost."""
    graph, count = first.graph, weights.size(1)
    places = graph.counted(size)
    tap = (places.spread(1) - places) - first.spread(1, 2)
    inside = (tap >= 0) & (tap < count)
    within = tap.at_least(0).at_most(count - 1).shaped(0, -1)
    return inside.where(weights.op("GatherElements", within, axis=1).shaped(0, size, size), 0.0)


def _roll(first: Value, weights: Value, headings: int) -> Value:
    """[to from] the one kernel [1 k] around the circle of headings."""
    bins = first.graph.counted(headings)
    on = (first + first.graph.counted(weights.size(1))) % headings
    shares = (bins.spread(1).equals(on).cast(F32) * weights).sum(1)
    return shares.gather((bins.spread(1) - bins) % headings)


def _clear_path(live: Value, shift_r: Value, shift_c: Value, grid: PoseGrid) -> Value:
    """[h r c] whether the straight way into a cell, back along its heading's shift, stays on live cells."""
    graph = live.graph
    shift_r, shift_c = shift_r.cast(F64), shift_c.cast(F64)
    longest = shift_r.absolute().at_least(shift_c.absolute())
    steps = longest.op("Floor").cast(I64)
    walked = longest.at_least(1.0)  # shorter ways take no step
    outside = grid.rows * grid.columns
    cells = live.cast(F32).shaped(-1).padded((0,), (1,), F32(0)) > 0.5

    def walk(turn: Value, clear: Value) -> Value:
        step = turn + 1
        rows, columns = (
            graph.counted(size) - (shift * step.cast(F64) / walked).rounded().cast(I64).spread(1)
            for shift, size in ((shift_r, grid.rows), (shift_c, grid.columns))
        )
        on = _within(rows, grid.rows).spread(2) & _within(columns, grid.columns).spread(1)
        behind = cells.gather(on.where(rows.spread(2) * grid.columns + columns.spread(1), outside))
        return clear & (behind | (steps < step).spread(1, 2))

    start = live & graph.filled(True, bool, grid.headings, 1, 1)
    return graph.repeated(steps.max(), walk, start, *grid.shape)


def _within(index: Value, size: int) -> Value:
    return (index >= 0) & (index < size)

"""The filter on the robot: one call a strip."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import ImpossibleEvidence, StepError
from learnfilter.core.estimate import Mode, entropy, modes
from learnfilter.core.lock import Lock
from learnfilter.core.poses import compose, through_mount
from learnfilter.core.strip import RingLayout, Strip
from learnfilter.runtime.bundle import Bundle
from learnfilter.runtime.cells import over_cells
from learnfilter.runtime.estimate import Estimate, base_mode
from learnfilter.runtime.motion import predict

Floats = NDArray[np.float32]


class _Moved(NamedTuple):
    """Motion of the sensor since the last weighed strip: composed [3], and how far in all."""

    motion: NDArray[np.float64] = np.zeros(3)
    travel_m: float = 0.0
    turn_rad: float = 0.0

    def then(self, motion: NDArray[np.float64]) -> _Moved:
        travel, turn = float(np.hypot(*motion[:2])), abs(float(motion[2]))
        return _Moved(compose(self.motion, motion), self.travel_m + travel, self.turn_rad + turn)


class _Read(NamedTuple):
    """What the belief said after the last weighed strip."""

    modes: tuple[Mode, ...]
    entropy: float
    log_evidence: float


class Localizer:
    """Runs a bundle's filter from an unknown start.

    A strip is weighed when it is the first, or when the robot has travelled or turned by the bundle's
    thresholds since the last that was; the belief moves only then.  In between, estimates are carried
    along by odometry.

    Args:
        bundle: from `load_bundle`; its features are computed here, once.
    """

    def __init__(self, bundle: Bundle):
        self._bundle, self._site = bundle, bundle.site
        self._live = bundle.site.live
        self._features = bundle.model.read(bundle.site)
        self.reset()

    def reset(self) -> None:
        """Forget everything: the robot has been switched on somewhere."""
        grid = self._site.grid
        share = np.float32(1.0 / (len(self._site.cells) * grid.headings))
        self._belief = np.broadcast_to(self._live * share, grid.shape)
        self._moved, self._lock = _Moved(), Lock()
        self._time_s = -math.inf
        self._read: _Read | None = None

    @property
    def belief(self) -> Floats:
        """[heading row column] probability of each sensor pose at the last weighed strip; read only."""
        view = self._belief.view()
        view.flags.writeable = False
        return view

    def step(
        self,
        odometry: ArrayLike,
        depth_m: ArrayLike,
        rgb: ArrayLike | None = None,
        time_s: float | None = None,
    ) -> Estimate:
        """Take in one strip.

        Args:
            odometry: [3] forward_m, left_m, turn_rad of the robot since the previous call, in the
                robot's previous frame; of no effect in the first call.
            depth_m: [w] range along each raw column; NaN where nothing came back.
            rgb: [w 3] sRGB in [0, 1], NaN where there is none; None for a strip without colour.
            time_s: seconds, increasing, or None.

        Raises:
            StepError: an input cannot be used; nothing has changed and the next call may follow.
            ImpossibleEvidence: the model's numbers overflow; nothing has changed.
        """
        strip, layout, grid = self._bundle.strip, self._site.layout, self._site.grid
        motion = _motion(odometry, math.hypot(grid.rows, grid.columns) * grid.cell_m)
        depth, colour = _laid(depth_m, rgb, strip, layout)
        if time_s is not None and not (math.isfinite(time_s) and time_s > self._time_s):
            raise StepError("time does not increase", place="time_s", expected="seconds", got=time_s)
        first = self._read is None
        moved = self._moved if first else self._moved.then(through_mount(motion, np.asarray(strip.mount)))
        weighing = self._bundle.weighing
        weighed = first or moved.travel_m >= weighing.after_m or moved.turn_rad >= weighing.after_rad
        if weighed:
            belief, log_evidence = self._weigh(self._belief if first else self._predict(moved), depth, colour)
            found = modes(belief, grid)
            self._belief, self._moved = belief, _Moved()
            self._read = _Read(found, entropy(belief), log_evidence)
            self._lock = self._lock.after(found[0].mass)
        else:
            self._moved = moved
        self._time_s = self._time_s if time_s is None else time_s
        return self._estimate(weighed)

    def _predict(self, moved: _Moved) -> Floats:
        odometry = moved.motion.astype(np.float32)
        return predict(self._belief, odometry, self._site.grid, self._live, self._bundle.noise)

    def _weigh(self, belief: Floats, depth: Floats, rgb: Floats) -> tuple[Floats, float]:
        """Belief [h r c] conditioned on a strip, and its log evidence in nats."""
        rows, columns = self._site.cells.T
        floor, poses = self._bundle.weighing.floor, len(rows) * len(belief)
        prior = belief[:, rows, columns] * np.float32(1 - floor) + np.float32(floor / poses)
        seen = self._bundle.model.log_likelihood(depth, rgb, self._features).T
        logits = np.log(prior) + over_cells(seen, self._site.cells, self._live)
        peak = logits.max()
        weights = np.exp(logits - peak)
        total = float(weights.sum(dtype=np.float64))
        log_evidence = float(peak) + math.log(total) if total > 0 else math.nan
        if not math.isfinite(log_evidence):
            raise ImpossibleEvidence(f"log evidence is {log_evidence}: the model's numbers overflow")
        weighed = np.zeros(belief.shape, np.float32)
        weighed[:, rows, columns] = weights / np.float32(total)
        return weighed, log_evidence

    def _estimate(self, weighed: bool) -> Estimate:
        assert self._read is not None
        mount = np.asarray(self._bundle.strip.mount)
        carried = tuple(
            base_mode(mode, self._moved.motion, mount, self._bundle.noise) for mode in self._read.modes
        )
        best = carried[0]
        return Estimate(
            best.pose,
            best.covariance,
            best.mass,
            self._read.entropy,
            carried,
            "locked" if self._lock.held else "searching",
            weighed,
            self._read.log_evidence,
        )


def _motion(odometry: ArrayLike, most_m: float) -> NDArray[np.float64]:
    """Odometry [3], checked: a leap across the whole site or beyond a full turn is a fault, not motion."""
    motion = _floats("odometry", odometry, (3,)).astype(np.float64)
    good = np.isfinite(motion).all() and np.hypot(*motion[:2]) <= most_m and abs(motion[2]) <= 2 * math.pi
    if not good:
        expected = f"finite, at most {most_m:.1f} m and one turn since the previous strip"
        raise StepError("odometry cannot be used", place="odometry", expected=expected, got=motion)
    return motion


def _laid(
    depth_m: ArrayLike, rgb: ArrayLike | None, strip: Strip, layout: RingLayout
) -> tuple[Floats, Floats]:
    """Depth [w'] and linear RGB [w' 3] on ring bearings; outside the sensor's ranges nothing came back."""
    depth = _floats("depth_m", depth_m, (strip.columns,))
    _refuse((depth < 0) | np.isinf(depth), "depth_m", "metres, or NaN where nothing came back", depth)
    measured = (depth >= np.float32(strip.min_range_m)) & (depth <= np.float32(strip.max_range_m))
    depth = layout.lay(np.where(measured, depth, np.nan)).astype(np.float32)
    if rgb is None:
        return depth, np.full((layout.columns, 3), np.nan, np.float32)
    if not strip.has_colour:
        raise StepError("this sensor has no colour", place="rgb", expected="None")
    colour = _floats("rgb", rgb, (strip.columns, 3))
    _refuse((colour < 0) | (colour > 1), "rgb", "sRGB in [0, 1], or NaN where there is none", colour)
    return depth, layout.lay(srgb_to_linear(colour), axis=0).astype(np.float32)


def _floats(name: str, values: ArrayLike, shape: Sequence[int]) -> NDArray[np.floating]:
    try:
        array = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise StepError("not numbers", place=name, expected=f"floats {shape}") from error
    if array.shape != shape:
        raise StepError("wrong width", place=name, expected=str(tuple(shape)), got=array.shape)
    return array


def _refuse(bad: NDArray[np.bool_], name: str, expected: str, values: NDArray[np.floating]) -> None:
    if bad.any():
        place = tuple(map(int, np.argwhere(bad)[0]))
        raise StepError("out of range", place=f"{name}{list(place)}", expected=expected, got=values[place])

"""The filter on the robot: one call a strip."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import StepError
from learnfilter.core.estimate import Mode, entropy, modes
from learnfilter.core.poses import compose, through_mount
from learnfilter.core.strip import RingLayout, Strip
from learnfilter.runtime.bundle import Bundle
from learnfilter.runtime.estimate import Estimate, base_mode
from learnfilter.runtime.motion import predict
from learnfilter.runtime.moves import Motion
from learnfilter.runtime.outlook import MODES, Outlook, expect, look_out, stand_ins
from learnfilter.runtime.part import Part
from learnfilter.runtime.standing import Standing
from learnfilter.runtime.tally import Counts, count
from learnfilter.runtime.weighing import Scale

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
    """What the belief said after the last weighed strip.

    Attributes:
        modes: of the sensor's pose, heaviest first.
        entropy: nats.
        log_evidence: nats.
        standing: whether that can be trusted.
    """

    modes: tuple[Mode, ...]
    entropy: float
    log_evidence: float
    standing: Standing


class Localizer:
    """Runs a bundle's filter from an unknown start.

    A strip is weighed when it is the first, or when the robot has travelled or turned by the bundle's
    thresholds since the last that was; the belief moves only then.  In between, estimates are carried
    along by odometry.  Cells that are hardly believed in are left out while the strip speaks for the others
    (see `weighing.weigh`), so a step of a robot that knows where it is costs little.

    Args:
        bundle: from `load_bundle`; memory for all its features is claimed here and never grows.
    """

    def __init__(self, bundle: Bundle):
        self._bundle = bundle
        self._scale = Scale.of(bundle)
        self._near = stand_ins(self._scale.index)
        self._counts = Counts.none(bundle.site.grid)
        self.reset()

    def reset(self) -> None:
        """Forget where it is: the robot has been switched on somewhere.  What was counted stays."""
        self._part = self._scale.nowhere()
        self._moved, self._watch = _Moved(), self._bundle.watch
        self._time_s = -math.inf
        self._read: _Read | None = None
        self._strip: tuple[Floats, Floats] | None = None

    @property
    def bundle(self) -> Bundle:
        """What it runs."""
        return self._bundle

    @property
    def features(self) -> Any:
        """The model's features of the site."""
        return self._scale.features

    @property
    def belief(self) -> Floats:
        """[heading row column] probability of each sensor pose at the last weighed strip; a copy."""
        whole = np.zeros(self._bundle.site.grid.shape, np.float32)
        whole[(slice(None), *self._part.window)] = self._part.planes
        return whole

    @property
    def counts(self) -> Counts:
        """How often each patch of the plan was found as drawn, or not, while locked; a copy."""
        return Counts(*(array.copy() for array in self._counts))

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
        strip, layout, grid = self._bundle.strip, self._bundle.site.layout, self._bundle.site.grid
        motion = _motion(odometry, math.hypot(grid.rows, grid.columns) * grid.cell_m)
        depth, colour = _laid(depth_m, rgb, strip, layout)
        if time_s is not None and not (math.isfinite(time_s) and time_s > self._time_s):
            raise StepError("time does not increase", place="time_s", expected="seconds", got=time_s)
        first = self._read is None
        moved = self._moved if first else self._moved.then(through_mount(motion, np.asarray(strip.mount)))
        weighing = self._bundle.weighing
        weighed = first or moved.travel_m >= weighing.after_m or moved.turn_rad >= weighing.after_rad
        if weighed:
            self._weigh(moved, depth, colour)
        else:
            self._moved = moved
        self._time_s = self._time_s if time_s is None else time_s
        self._strip = depth, colour
        return self._estimate(weighed)

    # ---- looking ahead, for movers; a StepError before the first strip -------------------------------

    @property
    def scale(self) -> Scale:
        """What strips are weighed with."""
        return self._scale

    @property
    def modes(self) -> tuple[Mode, ...]:
        """Of the sensor's pose at the last strip, heaviest first: at least one."""
        read, _ = self._told()
        poses = compose([mode.pose for mode in read.modes], self._moved.motion)
        return tuple(mode._replace(pose=pose) for mode, pose in zip(read.modes, poses, strict=True))

    def foresee(self, motion: Motion) -> Part:
        """The belief if the robot made a motion now, before the strip that would follow."""
        self._told()
        moved = self._moved.then(through_mount(motion, np.asarray(self._bundle.strip.mount)))
        site, odometry = self._bundle.site, moved.motion.astype(np.float32)
        return predict(self._part, odometry, site.grid, self._scale.live, self._bundle.noise)

    def promised(self, motion: Motion) -> tuple[Floats, Floats]:
        """The strips that the plan promises after a motion, one for each of `modes`.

        Returns:
            depth_m [k w] and linear rgb [k w 3] on ring bearings, as `scale` weighs them.
        """
        strip = self._bundle.strip
        poses = np.array([mode.pose for mode in self.modes])
        moved = through_mount([motion], np.asarray(strip.mount))
        depth, colour = (view[:, 0] for view in expect(poses, moved, self._bundle.site, self._near))
        return _measured(depth, strip), colour if strip.has_colour else np.full_like(colour, np.nan)

    def outlook(self, motions: Sequence[Motion]) -> Outlook:
        """What each mode of the belief promises after each motion."""
        read, (depth, colour) = self._told()
        strip, site = self._bundle.strip, self._bundle.site
        moves = through_mount(motions, np.asarray(strip.mount))
        rgb = colour if strip.has_colour else None
        return look_out(self.modes, moves, site, self._near, depth, rgb, read.entropy, strip.max_range_m)

    def _told(self) -> tuple[_Read, tuple[Floats, Floats]]:
        """What the last weighed strip said, and the last strip on ring bearings."""
        if self._read is None or self._strip is None:
            raise StepError("nothing is known before the first strip", place="step")
        return self._read, self._strip

    # ---- one strip ---------------------------------------------------------------------------------

    def _weigh(self, moved: _Moved, depth: Floats, colour: Floats) -> None:
        """Take a strip into the belief; nothing has changed if it cannot be."""
        bundle, before = self._bundle, self._read
        standing = Standing() if before is None else before.standing
        prior = self._part
        if before is not None:
            odometry = moved.motion.astype(np.float32)
            prior = predict(prior, odometry, bundle.site.grid, self._scale.live, bundle.noise)
        part, log_evidence = self._scale.weigh(prior, depth, colour)
        watch = None if self._watch is None else self._watch.after(log_evidence, standing.lock.held)
        alarmed = watch is not None and watch.alarmed
        standing, found = self._stand(standing, moved, part, alarmed)
        if standing.anew:
            # all that was believed came from strips of another place
            part, _ = self._scale.weigh(prior, depth, colour, bundle.weighing.restart)
            found = modes(part.planes, part.lattice(bundle.site.grid), MODES)
        if standing.lock.held:
            count(self._counts, bundle.site, self._scale.index, found[0].pose, depth)
        self._part, self._watch, self._moved = part, watch, _Moved()
        self._read = _Read(found, entropy(part.planes), log_evidence, standing)

    def _stand(
        self, before: Standing, moved: _Moved, part: Part, alarmed: bool
    ) -> tuple[Standing, tuple[Mode, ...]]:
        """The standing after a strip, and the modes of the belief it left."""
        lattice = part.lattice(self._bundle.site.grid)
        found = modes(part.planes, lattice, MODES)
        return before.after(found[0], moved.motion, part.planes, lattice, alarmed), found

    def _estimate(self, weighed: bool) -> Estimate:
        assert self._read is not None
        mount = np.asarray(self._bundle.strip.mount)
        carried = tuple(
            base_mode(mode, self._moved.motion, mount, self._bundle.noise) for mode in self._read.modes
        )
        best, watch = carried[0], self._watch
        return Estimate(
            best.pose,
            best.covariance,
            best.mass,
            self._read.entropy,
            carried,
            self._read.standing.state,
            weighed,
            self._read.log_evidence,
            math.nan if watch is None else watch.p,
            watch is not None and watch.alarmed and weighed,
            self._read.standing.anew and weighed,
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
    depth = layout.lay(_measured(depth, strip)).astype(np.float32)
    if rgb is None:
        return depth, np.full((layout.columns, 3), np.nan, np.float32)
    if not strip.has_colour:
        raise StepError("this sensor has no colour", place="rgb", expected="None")
    colour = _floats("rgb", rgb, (strip.columns, 3))
    _refuse((colour < 0) | (colour > 1), "rgb", "sRGB in [0, 1], or NaN where there is none", colour)
    return depth, layout.lay(srgb_to_linear(colour), axis=0).astype(np.float32)


def _measured(depth_m: NDArray[np.floating], strip: Strip) -> NDArray[np.floating]:
    """Depth with NaN, nothing came back, outside the sensor's ranges."""
    inside = (depth_m >= np.float32(strip.min_range_m)) & (depth_m <= np.float32(strip.max_range_m))
    return np.where(inside, depth_m, np.float32(np.nan))


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

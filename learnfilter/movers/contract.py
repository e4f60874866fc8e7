"""The one contract of movers, and what keeps every mover from driving into what the strip shows.

All is in the robot's frame (x forward, y left, metres, radians).  NumPy only: a robot runs this.
A motion found clear is clear as far as one strip shows; it is not a safety function.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.poses import wrap
from learnfilter.core.shapes import check

OUTLINE_STEP_M = 0.02  # pitch at which a swept area's outline is tested; below Footprint.clearance_m


class Motion(NamedTuple):
    """One short motion: straight to (forward_m, left_m) under the old heading, then turn."""

    forward_m: float
    left_m: float
    turn_rad: float

    @property
    def travels(self) -> bool:
        return self.forward_m != 0 or self.left_m != 0


class Mover(Protocol):
    """Decides from a strip where to go next."""

    def next(
        self, depth_m: NDArray[np.floating], bearings_rad: NDArray[np.floating], rng: np.random.Generator
    ) -> Motion:
        """The next motion of the robot.

        Args:
            depth_m: [w] range along each bearing, NaN where nothing came back.
            bearings_rad: [w] sensor-frame bearings, increasing.
            rng: draws where the choice is free.
        """
        ...


@dataclass(frozen=True)
class Footprint:
    """A round robot and its sensor.

    Attributes:
        radius_m: of the robot's disc about its centre.
        mount: pose of the sensor on the robot: x_m, y_m, heading_rad; on the disc.
        clearance_m: kept from everything the strip shows.
        skirt_m: ground this near the disc counts as clear where the sensor cannot look: the robot came
            past it.  At zero a camera of 90 degrees never sees enough of its flanks to set off (it
            takes 0.42 radii); larger trusts more unseen ground after a turn on the spot.
    """

    radius_m: float = 0.2
    mount: tuple[float, float, float] = (0.0, 0.0, 0.0)
    clearance_m: float = 0.05
    skirt_m: float = 0.1

    def __post_init__(self) -> None:
        if self.clearance_m <= OUTLINE_STEP_M or self.skirt_m < 0:
            raise ConfigError(
                "the footprint's margins are too small",
                place="mover",
                expected=f"clearance_m above {OUTLINE_STEP_M}, skirt_m not below 0",
                got=f"{self.clearance_m}, {self.skirt_m}",
            )
        if not np.hypot(*self.mount[:2]) <= self.radius_m:
            raise ConfigError("the sensor is not on the robot's disc", place="mover", got=self.mount)


def clear_motions(
    motions: Sequence[Motion], depth_m: ArrayLike, bearings_rad: ArrayLike, footprint: Footprint
) -> NDArray[np.bool_]:
    """Which motions sweep only ground that the strip shows to be free.

    The disc on its way to (forward, left) sweeps a capsule.  All of it beyond where the robot stands
    must be nearer than what the columns on either side of it show; a column in which nothing came
    back shows nothing, and so does all outside the field of view.  Turning on the spot sweeps nothing.

    Args:
        motions: [k].
        depth_m: [w] range along each bearing, NaN where nothing came back.
        bearings_rad: [w] sensor-frame bearings, increasing.
        footprint: the robot.

    Returns:
        [k].

    Raises:
        ShapeError: depth and bearings differ in length.
    """
    depth_m, bearings_rad = np.asarray(depth_m, dtype=float), np.asarray(bearings_rad, dtype=float)
    check("bearings_rad", bearings_rad, "w", **check("depth_m", depth_m, "w"))
    return np.array([not m.travels or _clear(m, depth_m, bearings_rad, footprint) for m in motions])


def _clear(motion: Motion, depth_m: NDArray, bearings_rad: NDArray, footprint: Footprint) -> bool:
    outline = _capsule(motion, footprint.radius_m + footprint.clearance_m)
    beyond = np.hypot(*outline.T) - footprint.radius_m - footprint.clearance_m
    x, y, heading = footprint.mount
    away = outline - [x, y]
    distance, bearing = np.hypot(*away.T), np.arctan2(away[:, 1], away[:, 0]) - heading
    free, in_view = free_range(bearing, depth_m, bearings_rad)
    # the capsule is convex and holds the sensor, so ground between it and a seen outline is seen too
    covered = np.where(in_view, distance < free, beyond <= footprint.skirt_m)
    return bool((covered | (beyond <= 1e-9)).all())


def _capsule(motion: Motion, radius_m: float) -> NDArray[np.float64]:
    """[k 2] outline of what a disc sweeps on its straight way from the origin."""
    way = np.array([motion.forward_m, motion.left_m])
    length = np.hypot(*way)
    ahead = way / length
    aside = np.array([-ahead[1], ahead[0]])
    angle = np.linspace(-np.pi / 2, np.pi / 2, int(np.ceil(np.pi * radius_m / OUTLINE_STEP_M)) + 1)
    cap = way + radius_m * (np.cos(angle)[:, None] * ahead + np.sin(angle)[:, None] * aside)
    along = np.linspace(0, 1, int(np.ceil(length / OUTLINE_STEP_M)) + 1)[:, None] * way
    return np.vstack([cap, along + radius_m * aside, along - radius_m * aside])


def free_range(
    bearing: NDArray, depth_m: NDArray, bearings_rad: NDArray
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """How far the strip shows free ground along sensor-frame bearings.

    Between two columns the nearer reading counts; half a step beyond the outer ones is still seen.

    Args:
        bearing: [k] radians.
        depth_m, bearings_rad: [w] the strip.

    Returns:
        [k] metres, zero where a column that matters shows nothing or nothing looks that way, and [k]
        whether the bearing is in the field of view.
    """
    shown = np.nan_to_num(depth_m, nan=0.0)
    middle = (bearings_rad[0] + bearings_rad[-1]) / 2
    relative, columns = wrap(bearing - middle), bearings_rad - middle
    half = np.diff(columns).max() / 2 if len(columns) > 1 else 0.0
    in_view = np.abs(relative) <= columns[-1] + half
    above = np.searchsorted(columns, relative).clip(0, len(columns) - 1)
    below = (np.searchsorted(columns, relative, side="right") - 1).clip(0, len(columns) - 1)
    return np.where(in_view, np.minimum(shown[above], shown[below]), 0.0), in_view

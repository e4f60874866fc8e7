"""The short motions a robot chooses among, and which of them the strip shows to be clear.

All is in the robot's frame (x forward, y left, metres, radians).  NumPy only: a robot runs this.
A motion found clear is clear as far as one strip shows; it is not a safety function.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

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

    @property
    def length_m(self) -> float:
        return float(np.hypot(self.forward_m, self.left_m))


# As many to the left as to the right: with more to one side the robot would circle.
MOTIONS = (
    Motion(0.5, 0.0, 0.0),
    Motion(0.25, 0.0, np.pi / 8),
    Motion(0.25, 0.0, -np.pi / 8),
    Motion(0.0, 0.0, np.pi / 8),
    Motion(0.0, 0.0, -np.pi / 8),
    Motion(0.0, 0.0, np.pi / 4),
    Motion(0.0, 0.0, -np.pi / 4),
    Motion(0.0, 0.0, np.pi / 2),
    Motion(0.0, 0.0, -np.pi / 2),
)


def check_motions(motions: Sequence[Motion]) -> None:
    """Refuse a set in which a blocked robot could not turn away.

    Raises:
        ConfigError: no turn on the spot to the left, or none to the right.
    """
    sides = {np.sign(motion.turn_rad) for motion in motions if not motion.travels}
    if not {-1.0, 1.0} <= sides:
        raise ConfigError(
            "a blocked robot could not turn away",
            place="mover.moves",
            expected="a turn on the spot to either side",
            got=motions,
        )


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
    skirt_m: float = 0.15

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
    swept = _swept(tuple(motions), bearings_rad.tobytes(), footprint)
    covered = swept.trusted | (swept.distance_m < swept.columns.free(depth_m))
    clear = np.ones(len(motions), dtype=bool)
    clear[swept.travels] = np.logical_and.reduceat(covered, swept.begins)
    return clear


class _Columns(NamedTuple):
    """Between which columns of a strip bearings [k] lie.

    Attributes:
        below, above: [k] the columns on either side, one twice where it is met or is the outermost.
        in_view: [k] half a step beyond the outer columns is still seen.
    """

    below: NDArray[np.int64]
    above: NDArray[np.int64]
    in_view: NDArray[np.bool_]

    @classmethod
    def beside(cls, bearing: NDArray, bearings_rad: NDArray) -> _Columns:
        middle = (bearings_rad[0] + bearings_rad[-1]) / 2
        relative, columns = wrap(bearing - middle), bearings_rad - middle
        half = np.diff(columns).max() / 2 if len(columns) > 1 else 0.0
        above = np.searchsorted(columns, relative).clip(0, len(columns) - 1)
        below = (np.searchsorted(columns, relative, side="right") - 1).clip(0, len(columns) - 1)
        return cls(below, above, np.abs(relative) <= columns[-1] + half)

    def free(self, depth_m: NDArray) -> NDArray[np.float64]:
        """[k] metres shown to be free: the nearer reading counts, a missing one shows nothing."""
        shown = np.where(np.isfinite(depth_m), depth_m, 0.0)
        return np.minimum(shown[self.below], shown[self.above]) * self.in_view


class _Swept(NamedTuple):
    """Outlines, end to end [n], of what the travelling motions sweep, and how a strip looks at them.

    Attributes:
        columns: that look at each point.
        distance_m: of each from the sensor.
        trusted: whether it needs no look.
        begins: where in them each travelling motion's outline begins.
        travels: which of the motions those are.
    """

    columns: _Columns
    distance_m: NDArray[np.float64]
    trusted: NDArray[np.bool_]
    begins: list[int]
    travels: list[int]


@lru_cache(maxsize=32)  # a robot asks with one set of motions, one strip and one footprint all day
def _swept(motions: tuple[Motion, ...], bearings: bytes, footprint: Footprint) -> _Swept:
    travels = [k for k, motion in enumerate(motions) if motion.travels]
    reach = footprint.radius_m + footprint.clearance_m
    outlines = [_capsule(motions[k], reach) for k in travels]
    outline = np.vstack([np.empty((0, 2)), *outlines])
    beyond = np.hypot(*outline.T) - reach
    x, y, heading = footprint.mount
    away = outline - [x, y]
    bearing = np.arctan2(away[:, 1], away[:, 0]) - heading
    # the capsule is convex and holds the sensor, so ground between it and a seen outline is seen too
    columns = _Columns.beside(bearing, np.frombuffer(bearings))
    trusted = (beyond <= 1e-9) | (~columns.in_view & (beyond <= footprint.skirt_m))
    begins = np.cumsum([0, *map(len, outlines)])[:-1].tolist()
    return _Swept(columns, np.hypot(*away.T), trusted, begins, travels)


def _capsule(motion: Motion, radius_m: float) -> NDArray[np.float64]:
    """[k 2] outline of what a disc sweeps on its straight way from the origin."""
    way = np.array([motion.forward_m, motion.left_m])
    ahead = way / motion.length_m
    aside = np.array([-ahead[1], ahead[0]])
    angle = np.linspace(-np.pi / 2, np.pi / 2, int(np.ceil(np.pi * radius_m / OUTLINE_STEP_M)) + 1)
    cap = way + radius_m * (np.cos(angle)[:, None] * ahead + np.sin(angle)[:, None] * aside)
    along = np.linspace(0, 1, int(np.ceil(motion.length_m / OUTLINE_STEP_M)) + 1)[:, None] * way
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
    columns = _Columns.beside(bearing, bearings_rad)
    return columns.free(depth_m), columns.in_view

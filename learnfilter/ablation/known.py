"""Everything the oracle knows of one drive: the world as it was, the sensor's faults, the wheels.

Plain numbers and arrays, so that the oracle can be built by whoever owns a simulator.  All lengths are
metres of the true world.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout

FINER = 4  # cells and heading bins of the oracle to one of the common lattice, on each axis


class Things(NamedTuple):
    """What rays meet.

    Attributes:
        solid: [k 4] segments that stop every ray.
        glass: [g 4] panes.
        albedo: [k + g + n 3] linear colour of solid, glass and people, in this order.
        discs: [s n 2] people at each step.
        disc_radius_m: of each of them.
        aside_m: a person nearer than this is not seen.
    """

    solid: NDArray[np.float64]
    glass: NDArray[np.float64]
    albedo: NDArray[np.float64]
    discs: NDArray[np.float64]
    disc_radius_m: float
    aside_m: float


class Glow(NamedTuple):
    """Light of the drive, linear.

    Attributes:
        ambient: [r c] at the centres of the oracle's cells.
        rgb: [3] factor on each channel.
        beyond: [3] what is seen where no ray meets anything.
        lamp: irradiance of the robot's own lamp, face-on at 1 m.
        lamp_near_m: nearer than this it lights no brighter.
    """

    ambient: NDArray[np.float64]
    rgb: NDArray[np.float64]
    beyond: NDArray[np.float64]
    lamp: float
    lamp_near_m: float


class Faults(NamedTuple):
    """How the sensor errs.

    Attributes:
        range_step_m: tables below have nodes at multiples of it.
        spread_m: [i j] standard deviation of range; j counts the cosine of incidence from 0 to 1.
        missing_white, missing_black: [i j] chance that nothing comes back from such a surface.
        dropped: chance that a column is lost whole.
        short: chance that a reading comes from anywhere before the surface.
        mixed: chance that a reading at an edge lies between near and far.
        glass_through, glass_none: shares of readings that pass glass, and that are lost in it.
        colour_sd, colour_sd_share: spread of linear colour, and as a share of its value.
        range_scale: measured over true range.
        min_range_m, max_range_m: no reading lies outside.
        sight_m: colour is seen so far.
    """

    range_step_m: float
    spread_m: NDArray[np.float64]
    missing_white: NDArray[np.float64]
    missing_black: NDArray[np.float64]
    dropped: float
    short: float
    mixed: float
    glass_through: float
    glass_none: float
    colour_sd: float
    colour_sd_share: float
    range_scale: float
    min_range_m: float
    max_range_m: float
    sight_m: float


class Known(NamedTuple):
    """All but the poses and the draws of noise.

    Attributes:
        grid: the oracle's lattice over the true world; FINER times the common one on each axis.
        layout: how strips lie on the oracle's rings.
        bearings_rad: [w] true bearing of each strip position in the declared sensor's frame: the
            sensor's own bearings, turned as it was mounted.
        depth_m: [s w] NaN where nothing came back.
        rgb: [s w 3] linear, NaN in columns lost whole; None for a sensor without colour.
        things, glow, faults: the world and the sensor.
        motion: [s 3] measured forward_m, left_m, turn_rad of the sensor, true to scale.
        spread: [s 2] standard deviations of travel (each axis, metres) and of turn (radians).
        start: [r c] share of each cell in which the robot's centre can begin.
        standing: [r c] cells that the robot's centre can be in.
        passable: [r c] cells that it may pass between two steps.
        lean: [h 2] rows and columns from the robot's cell to the sensor's.
    """

    grid: PoseGrid
    layout: RingLayout
    bearings_rad: NDArray[np.float64]
    depth_m: NDArray[np.float64]
    rgb: NDArray[np.float64] | None
    things: Things
    glow: Glow
    faults: Faults
    motion: NDArray[np.float64]
    spread: NDArray[np.float64]
    start: NDArray[np.float64]
    standing: NDArray[np.bool_]
    passable: NDArray[np.bool_]
    lean: NDArray[np.int64]

    def usable(self) -> NDArray[np.bool_]:
        """[s w] columns that say something: served by the sensor, and not lost whole."""
        if self.rgb is None:
            return np.broadcast_to(np.isfinite(self.bearings_rad), self.depth_m.shape)
        return np.isfinite(self.bearings_rad) & np.isfinite(self.rgb[..., 0])

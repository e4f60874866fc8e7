"""Tell the oracle what the simulator knows of a drive."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from learnfilter.ablation.known import FINER, Faults, Glow, Known, Things
from learnfilter.ablation.oracle import common_lattice, follow
from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.grid import PoseGrid
from learnfilter.core.poses import compose, inverse
from learnfilter.core.strip import RingLayout, Strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import Course
from learnfilter.filtering.rollout import lay_strips
from learnfilter.filtering.trace import Trace
from learnfilter.plan.floorplan import DOOR, OPEN, WINDOW
from learnfilter.render import live_cells
from learnfilter.render.field import distance_lattice
from learnfilter.sim.clutter import PERSON_RADIUS_M
from learnfilter.sim.driver import SMALLEST_M2
from learnfilter.sim.free import CELL_M
from learnfilter.sim.light import LAMP, LAMP_NEAR_M
from learnfilter.sim.odometry import OdometryNoise
from learnfilter.sim.sensor import (
    CAMERA,
    DAYLIGHT,
    PERSONAL_SPACE_M,
    SCANNER,
    SIGHT,
    missing_chance,
    range_sd,
)
from learnfilter.sim.world import World

# Points a cell side by which the share of a cell that the robot may stand in is measured.
POINTS = 4
# Nodes of the sensor's tables: metres of range, and steps of the cosine of incidence.
RANGE_STEP_M, COSINES = 0.02, 64


def oracle_trace(
    world: World, drive: Drive, course: Course, common: PoseGrid, steps: int | None = None
) -> Trace:
    """What a filter that knows the simulated world believes along a drive.

    Args:
        world: in which the drive was made.
        drive: the drive.
        course: the same, cut to weighed strips.
        common: lattice on which all filters are scored.
        steps: at most this many strips; None for all.

    Returns:
        Its trace on the common lattice, where mass in cells that are not live counts for the nearest
        live one, as the true pose does.
    """
    live = live_cells(world.plan, common, world.robot_radius_m)
    known = know(world, drive, course, common)
    return follow(known, common_lattice(common, live), course.name, course.poses, steps)


def know(world: World, drive: Drive, course: Course, common: PoseGrid) -> Known:
    """The oracle's knowledge of a drive; arguments as for `oracle_trace`."""
    grid = _true_grid(world, common)
    strip, rows = drive.strip, course.steps.rows
    layout = _layout(strip, grid.headings)
    laid = lay_strips(drive, layout, rows)
    turned = np.radians(world.conditions.mount_turn_deg)
    bearings = layout.lay(np.array(strip.bearings_rad)) + turned
    start, standing, passable = _floor(world, grid)
    motion, spread = _way(world, drive, course)
    return Known(
        grid=grid,
        layout=layout,
        bearings_rad=bearings,
        depth_m=laid.depth_m.numpy().astype(np.float64),
        rgb=laid.rgb.numpy().astype(np.float64) if strip.has_colour else None,
        things=_things(world, drive.time_s[rows]),
        glow=_glow(world, grid),
        faults=_faults(world, strip),
        motion=motion,
        spread=spread,
        start=start,
        standing=standing,
        passable=passable,
        lean=_lean(strip, grid),
    )


def _true_grid(world: World, common: PoseGrid) -> PoseGrid:
    """The finer lattice as it lies on the true world, which the plan may show too large."""
    scale = world.conditions.plan_scale
    left, bottom, right, top = world.plan.bounds
    middle = (left + right) / 2, (bottom + top) / 2
    corner = (m + (c - m) / scale for m, c in zip(middle, (common.left_m, common.bottom_m), strict=True))
    return PoseGrid(
        FINER * common.headings, FINER * common.rows, FINER * common.columns,
        common.cell_m / FINER / scale, *corner,
    )  # fmt: skip


def _layout(strip: Strip, headings: int) -> RingLayout:
    """The coarsest ring that has a bearing for each column."""
    angles = np.sort(np.array(strip.bearings_rad)[~np.isin(np.arange(strip.columns), strip.blind)])
    step = np.diff(angles).min() if len(angles) > 1 else np.pi
    return lay_on_ring(strip, headings, int(np.ceil(2 * np.pi / headings / step - 1e-6)))


def _floor(world: World, grid: PoseGrid) -> tuple[NDArray[np.float64], NDArray[np.bool_], NDArray[np.bool_]]:
    """Share of each cell the robot may start in, where it may stand, and what it may pass."""
    step, radius = grid.cell_m / POINTS, world.robot_radius_m
    size = POINTS * grid.rows, POINTS * grid.columns
    away = distance_lattice(world.obstacles, grid.left_m, grid.bottom_m, step, *size, 2 * radius)
    floor = world.floor
    parts = floor.components()
    area = np.bincount(parts[world.start], minlength=parts.max() + 1) * CELL_M**2
    roomy = world.start & (area[parts] >= SMALLEST_M2)
    roomy = roomy if roomy.any() else world.start
    place = (np.arange(n) + 0.5 for n in size)
    y, x = (o + step * p for o, p in zip((grid.bottom_m, grid.left_m), place, strict=True))
    rows = np.rint((y - floor.bottom_m) / CELL_M).astype(int)
    columns = np.rint((x - floor.left_m) / CELL_M).astype(int)
    on_floor = np.zeros(size, bool)
    inside = np.ix_((rows >= 0) & (rows < len(roomy)), (columns >= 0) & (columns < roomy.shape[1]))
    on_floor[inside] = roomy[np.ix_(rows.clip(0, len(roomy) - 1), columns.clip(0, roomy.shape[1] - 1))][
        inside
    ]
    cells = (grid.rows, POINTS, grid.columns, POINTS)
    clear = (away >= radius).reshape(cells)
    start = (clear & on_floor.reshape(cells)).mean(axis=(1, 3))
    # an arc bulges from its chord, so what lies between two steps is held to half the radius only
    passable = (away >= radius / 2).reshape(cells).any(axis=(1, 3))
    return start, np.any(clear, axis=(1, 3)), np.asarray(passable)


def _lean(strip: Strip, grid: PoseGrid) -> NDArray[np.int64]:
    """[h 2] rows and columns from the robot's cell to the sensor's."""
    at = np.zeros((grid.headings, 3))
    at[:, 2] = grid.heading_centres()
    robot = compose(at, inverse(np.array(strip.mount)))
    return np.rint(-robot[:, [1, 0]] / grid.cell_m).astype(np.int64)


def _things(world: World, time_s: NDArray[np.float64]) -> Things:
    truth = world.truth
    stops = (truth.kind != DOOR) | (truth.state != OPEN)
    glass = stops & (truth.kind == WINDOW)
    solid = stops & ~glass
    palette = srgb_to_linear([finish.srgb for finish in truth.finishes])
    people = world.people
    return Things(
        truth.segments[solid],
        truth.segments[glass],
        np.vstack([palette[truth.finish[solid]], palette[truth.finish[glass]], people.linear_rgb]),
        people.at(time_s),
        PERSON_RADIUS_M,
        PERSONAL_SPACE_M,
    )


def _glow(world: World, grid: PoseGrid) -> Glow:
    ambient = world.light.ambient(*np.meshgrid(grid.x_centres(), grid.y_centres()))
    return Glow(ambient, world.light.rgb, DAYLIGHT, LAMP, LAMP_NEAR_M)


def _faults(world: World, strip: Strip) -> Faults:
    faults, conditions = CAMERA if strip.has_colour else SCANNER, world.conditions
    reach, cosine = np.meshgrid(
        np.arange(0.0, strip.max_range_m + RANGE_STEP_M, RANGE_STEP_M),
        np.linspace(0, 1, COSINES),
        indexing="ij",
    )
    incidence = np.arccos(cosine)
    white, black = (
        conditions.missing_scale
        * missing_chance(reach, incidence, np.full((*reach.shape, 3), shade), strip.max_range_m, faults)
        for shade in (1.0, 0.0)
    )
    return Faults(
        range_step_m=RANGE_STEP_M,
        spread_m=range_sd(reach, incidence, faults),
        missing_white=white.clip(0, 1),
        missing_black=black.clip(0, 1),
        dropped=min(conditions.missing_scale * faults.burst * faults.burst_columns, 0.9),
        short=faults.short,
        mixed=faults.mixed,
        glass_through=faults.glass_through,
        glass_none=faults.glass_none,
        colour_sd=faults.colour_sd,
        colour_sd_share=faults.colour_sd_share,
        range_scale=conditions.range_scale,
        min_range_m=strip.min_range_m,
        max_range_m=strip.max_range_m,
        sight_m=SIGHT * strip.max_range_m,
    )


def _way(world: World, drive: Drive, course: Course) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Motion of the sensor between weighed strips, true to scale, and its spreads."""
    conditions, noise = world.conditions, OdometryNoise()
    motion = course.steps.odometry.numpy().astype(np.float64) / [
        conditions.odometry_scale, conditions.odometry_scale, 1.0
    ]  # fmt: skip
    travel = np.hypot(drive.odometry[:, 0], drive.odometry[:, 1]) / conditions.odometry_scale
    turn = np.abs(drive.odometry[:, 2])
    variance = np.stack(
        [
            (noise.travel_from_travel * travel) ** 2 + (noise.travel_from_turn * turn) ** 2,
            (noise.turn_from_turn * turn) ** 2 + (noise.turn_from_travel * travel) ** 2,
        ],
        axis=1,
    )
    sums = np.vstack([np.zeros(2), np.cumsum(variance, axis=0)])
    rows = course.steps.rows
    between = np.diff(sums[rows + 1], axis=0, prepend=sums[rows[:1] + 1])
    scale = [conditions.odometry_noise_scale / conditions.odometry_scale, conditions.odometry_noise_scale]
    return motion, np.sqrt(between) * scale

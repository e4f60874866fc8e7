"""Render a plan: what the sensor should see from the centre of every live cell."""

from __future__ import annotations

import hashlib

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import ConfigError, ShapeError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.plan.floorplan import DOOR, NO_FINISH, SHUT, UNKNOWN, WINDOW, FloorPlan
from learnfilter.render.field import distance_field
from learnfilter.render.live import live_cells
from learnfilter.render.rays import build_scene, cast_fan
from learnfilter.render.site import Site

# Part of every site's key: raise it when the same plan and settings render differently than before.
RENDER_VERSION = 2
WINDOWS = ("unsure", "solid", "clear")
# An unknown door or window drawn this close before a wall hides nothing: the ray ends at the wall.
COINCIDE_M = 0.01


def render_site(
    plan: FloorPlan,
    layout: RingLayout,
    grid: PoseGrid,
    *,
    robot_radius_m: float,
    max_range_m: float,
    windows: str = "unsure",
    field_scale: int = 2,
) -> Site:
    """Cast every ring of a plan.

    Walls, solid things and shut doors stop a ray; open doors never do.  Unknown doors, windows
    ('unsure') and the edges of unmapped area end it without evidence: range is the distance to
    them, `unsure` is True, and no finish is named since nobody knows whose colour shows.

    Args:
        plan: what stands where.
        layout: how strips lie on rings.
        grid: lattice of sensor poses; its headings and the layout's must agree.
        robot_radius_m: keeps live cells clear of walls.
        max_range_m: nothing beyond comes back.
        windows: 'unsure', 'solid' (stop rays as walls do) or 'clear' (rays pass).
        field_scale: sub-cells a cell side of the distance field.

    Returns:
        The site; equal inputs give an equal key.

    Raises:
        ConfigError: a setting is out of range.
        PlanError: no cell is live.
        ShapeError: layout and grid disagree about headings.
    """
    key = site_key(plan, layout, grid, robot_radius_m, max_range_m, windows, field_scale)
    live = live_cells(plan, grid, robot_radius_m)
    cells = np.argwhere(live).astype(np.int32, order="C")
    range_m, unsure, finish = cast_rings(
        plan,
        grid.x_centres()[cells[:, 1]],
        grid.y_centres()[cells[:, 0]],
        layout.ring_angles(),
        max_range_m,
        windows,
    )
    palette = srgb_to_linear([f.srgb for f in plan.finishes]).astype(np.float32).reshape(-1, 3)
    field_m = distance_field(plan, grid, field_scale, windows)
    return Site(
        plan.name,
        grid,
        layout,
        max_range_m,
        cells,
        live,
        range_m,
        unsure,
        finish,
        palette,
        field_m,
        field_scale,
        key,
    )


def site_key(
    plan: FloorPlan,
    layout: RingLayout,
    grid: PoseGrid,
    robot_radius_m: float,
    max_range_m: float,
    windows: str,
    field_scale: int,
) -> str:
    """SHA-256 of all that goes into a site, after checking that it fits together."""
    if layout.bearings != grid.headings * layout.bearings_per_heading:
        raise ShapeError(f"{layout.bearings} ring bearings do not divide into {grid.headings} headings")
    if windows not in WINDOWS:
        raise ConfigError(
            "unknown setting for windows", place="windows", expected=f"one of {WINDOWS}", got=windows
        )
    if not max_range_m > 0 or field_scale < 1:
        raise ConfigError(
            "a site needs a positive range and scale",
            place="max_range_m, field_scale",
            got=f"{max_range_m}, {field_scale}",
        )
    settings = (layout, grid, float(robot_radius_m), float(max_range_m), windows, field_scale)
    return hashlib.sha256(repr((RENDER_VERSION, plan.content_hash(), settings)).encode()).hexdigest()


def cast_rings(
    plan: FloorPlan,
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    angles: NDArray[np.float64],
    max_range_m: float,
    windows: str = "unsure",
) -> tuple[NDArray[np.float32], NDArray[np.bool_], NDArray[np.int16]]:
    """What a plan predicts from any points.

    Args:
        plan: what stands where.
        x, y: [n] sensor positions, metres.
        angles: [p] site angles, radians.
        max_range_m: nothing beyond comes back.
        windows: as for `render_site`.

    Returns:
        range_m [n p] (inf where nothing is within reach), unsure [n p] and finish [n p] (-1 unknown),
        as in `Site`.
    """
    stops, doubtful = _sort_segments(plan, windows)
    range_m, segment = cast_fan(build_scene(plan.segments[stops]), x, y, angles, max_range_m)
    # segment -1 (nothing met) takes the last entry
    finish = np.append(plan.finish[stops], np.int16(NO_FINISH))[segment]
    maybe = np.vstack([plan.segments[doubtful], *map(_edges, plan.unmapped)])
    if not len(maybe):
        return range_m, np.zeros(range_m.shape, bool), finish
    before_m, _ = cast_fan(build_scene(maybe), x, y, angles, max_range_m)
    unsure = before_m < range_m - COINCIDE_M
    return np.where(unsure, before_m, range_m), unsure, np.where(unsure, np.int16(NO_FINISH), finish)


def _sort_segments(plan: FloorPlan, windows: str) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Masks [n] of the segments that stop rays and of those that may."""
    door, window = plan.kind == DOOR, plan.kind == WINDOW
    doubtful = door & (plan.state == UNKNOWN)
    if windows == "unsure":
        doubtful |= window
    passed = door & (plan.state != SHUT)
    if windows != "solid":
        passed |= window
    return ~passed, doubtful


def _edges(outline: NDArray[np.float64]) -> NDArray[np.float64]:
    """[k 4] edges of a closed outline, whether or not its last point repeats the first."""
    return np.hstack([outline, np.roll(outline, -1, axis=0)])

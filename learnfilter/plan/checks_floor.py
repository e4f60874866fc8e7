"""Where a robot gets to on a plan: leaks, islands, and whether there is a floor at all.

Free space is the plan grown by the robot's radius and taken away from its surroundings.  *Outside* is
what joins the surroundings while every door is shut; the floor is the rest, joined through every door
that may be open.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely import Geometry
from shapely.geometry import Polygon, box

from learnfilter.plan.finding import Finding
from learnfilter.plan.floorplan import DOOR, SHUT, FloorPlan

# Gaps up to twice this are closed to guess what the walls were meant to enclose (wider than a door).
CLOSING_M = 0.75
# Smaller pieces of floor are corners and niches that a robot's radius cuts off.
SMALLEST_AREA_M2 = 0.5
# A leak smaller than this is a recess in a facade rather than a missing wall.
SMALLEST_LEAK_M2 = 4.0


def check_floor(plan: FloorPlan, robot_radius_m: float) -> list[Finding]:
    """Findings about the free space of a robot of that radius (metres, above 0)."""
    left, bottom, right, top = plan.bounds
    margin = 2 * (robot_radius_m + CLOSING_M)
    frame = box(left - margin, bottom - margin, right + margin, top + margin)
    passable = (plan.kind == DOOR) & (plan.state != SHUT)
    shut = _grown(plan, np.ones(len(plan.kind), dtype=bool), robot_radius_m)
    outside = _parts_at_edge(frame.difference(shut), frame)
    floor = frame.difference(_grown(plan, ~passable, robot_radius_m)).difference(outside)
    areas = [part for part in shapely.get_parts(floor) if part.area >= SMALLEST_AREA_M2]
    findings = _leaks(plan, outside, shut, robot_radius_m)
    findings += _seed(plan, areas)
    if not areas:
        message = f"No floor is enclosed for a robot of radius {robot_radius_m:.2f} m."
        advice = "Close the outer walls, or check the units of the file."
        return [*findings, Finding("error", "no_free_space", message, None, advice)]
    return findings + _islands(plan, areas)


def _grown(plan: FloorPlan, blocking: NDArray[np.bool_], radius_m: float) -> Geometry:
    """All that blocks, grown by a radius; `blocking` [n] says which segments do."""
    lines = shapely.linestrings(plan.segments[blocking].reshape(-1, 2, 2))
    areas = [Polygon(outline) for outline in (*plan.solids, *plan.unmapped)]
    grown = shapely.buffer(np.array([*lines, *areas], dtype=object), radius_m, quad_segs=4)
    return shapely.union_all(grown)


def _parts_at_edge(free: Geometry, frame: Polygon) -> Geometry:
    return shapely.union_all([part for part in shapely.get_parts(free) if part.intersects(frame.exterior)])


def _leaks(plan: FloorPlan, outside: Geometry, shut: Geometry, radius_m: float) -> list[Finding]:
    """Floor that the walls seem meant to enclose and that can be reached from outside all the same.

    An opening wider than 2 CLOSING_M leaves no such floor: then the room itself counts as outside.
    """
    closed = shapely.buffer(shut, CLOSING_M, quad_segs=4)
    meant = shapely.union_all([Polygon(part.exterior) for part in shapely.get_parts(closed)])
    meant = shapely.buffer(meant, -CLOSING_M - radius_m, quad_segs=4)
    findings = []
    for part in shapely.get_parts(outside.intersection(meant)):
        if part.area >= SMALLEST_LEAK_M2:
            x, y = _inside(part)
            message = f"{part.area:.1f} m2 of floor around ({x:.2f}, {y:.2f}) join the outside through a gap."
            advice = "Close the gap in the walls, or draw a door in it."
            findings.append(Finding("warning", "leak", message, (x, y), advice))
    return findings


def _seed(plan: FloorPlan, areas: list[Polygon]) -> list[Finding]:
    if plan.seed is None or any(area.intersects(shapely.Point(plan.seed)) for area in areas):
        return []
    x, y = plan.seed
    message = f"The robot cannot stand at the plan's seed ({x:.2f}, {y:.2f}), or it is outside."
    return [Finding("error", "seed", message, (x, y), "Move the seed onto the robot's floor.")]


def _islands(plan: FloorPlan, areas: list[Polygon]) -> list[Finding]:
    """Floor that does not join the main one: the seed's, else the largest."""
    seed = None if plan.seed is None else shapely.Point(plan.seed)
    main = max(areas, key=lambda area: (seed is not None and area.intersects(seed), area.area))
    findings = []
    for area in sorted(areas, key=lambda area: -area.area):
        if area is not main:
            x, y = _inside(area)
            message = (
                f"{area.area:.1f} m2 of floor around ({x:.2f}, {y:.2f}) are cut off from the main floor."
            )
            advice = "Draw the door that leads there; without one the robot is never expected there."
            findings.append(Finding("warning", "island", message, (x, y), advice))
    return findings


def _inside(area: Geometry) -> tuple[float, float]:
    point = area.representative_point()
    return float(point.x), float(point.y)

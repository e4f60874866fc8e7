"""What is wrong with a plan, said so that a person can act on it: the drawing itself.

`check_plan` joins these to the floor's checks (checks_floor.py), which ask where a robot gets to.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.plan.checks_floor import check_floor
from learnfilter.plan.finding import SEVERITIES, Finding, Severity
from learnfilter.plan.floorplan import DOOR, DOOR_STATES, KINDS, SHUT, FloorPlan

# Two ends nearer than this touch: drawings and projections round to about a centimetre.
TOUCH_M = 0.02
# A wall that ends this near another was most likely meant to reach it (common practice, no source).
NEARLY_M = 0.5
# Below this a wall is a slip of the pen.
SHORT_WALL_M = 0.01
# Two surfaces are drawn twice if they share more than this, within TOUCH_M.
OVERLAP_M = 0.1
PLAUSIBLE_EXTENT_M = (3.0, 1000.0)
PLAUSIBLE_DOOR_M = (0.6, 2.5)


def check_plan(plan: FloorPlan, *, robot_radius_m: float = 0.25) -> tuple[Finding, ...]:
    """Look for what would spoil work with this plan.

    Args:
        plan: any plan.
        robot_radius_m: of the robot, which decides where it fits.

    Returns:
        Findings, the gravest first; none if all is well.

    Raises:
        ConfigError: the robot has no size.
    """
    if not robot_radius_m > 0:
        raise ConfigError(
            "the robot has no size", place="robot_radius_m", expected="above 0", got=robot_radius_m
        )
    findings = [
        *_scale(plan),
        *_finishes(plan),
        *_short_walls(plan),
        *_open_ends(plan),
        *_drawn_twice(plan),
        *_narrow_doors(plan, 2 * robot_radius_m),
        *check_floor(plan, robot_radius_m),
    ]
    return tuple(sorted(findings, key=lambda finding: SEVERITIES.index(finding.severity)))


def _lengths(plan: FloorPlan) -> NDArray[np.float64]:
    along = plan.segments[:, 2:] - plan.segments[:, :2]
    return np.hypot(along[:, 0], along[:, 1])


def _scale(plan: FloorPlan) -> list[Finding]:
    left, bottom, right, top = plan.bounds
    extent = max(right - left, top - bottom)
    low, high = PLAUSIBLE_EXTENT_M
    if not low <= extent <= high:
        message = f"The plan is {extent:,.2f} m across, which is not a building in metres."
        return [Finding("warning", "scale", message, None, "Check the units of the file.")]
    widths = _lengths(plan)[plan.kind == DOOR]
    low, high = PLAUSIBLE_DOOR_M
    if len(widths) and not low <= np.median(widths) <= high:
        median = np.median(widths)
        message = f"The median width of {len(widths)} doors is {median:.2f} m, not {low} to {high} m."
        return [Finding("warning", "scale", message, None, "Check the units of the file.")]
    return []


def _finishes(plan: FloorPlan) -> list[Finding]:
    if plan.has_finishes:
        return []
    advice = "Name finishes in the plan to use the sensor's colours."
    return [Finding("note", "no_finishes", "No surface has a finish: depth only.", None, advice)]


def _short_walls(plan: FloorPlan) -> list[Finding]:
    short = np.flatnonzero(_lengths(plan) < SHORT_WALL_M)
    if not len(short):
        return []
    x, y = plan.segments[short[0], :2]
    message = (
        f"{len(short)} edges are shorter than {SHORT_WALL_M} m, the first at ({x:.2f}, {y:.2f}), "
        f"feature {plan.feature[short[0]]}."
    )
    return [Finding("note", "short_walls", message, (float(x), float(y)), "Delete them or merge their ends.")]


def _open_ends(plan: FloorPlan) -> list[Finding]:
    """Ends of walls that stop just short of another: light and rays get through, robots do not."""
    lines = shapely.linestrings(plan.segments.reshape(-1, 2, 2))
    ends = plan.segments.reshape(-1, 2)  # end 2 i and 2 i + 1 belong to segment i
    tree = shapely.STRtree(lines)
    end, other = tree.query(shapely.points(ends), predicate="dwithin", distance=TOUCH_M)
    meets = end // 2 != other
    touching = set(zip(end[meets].tolist(), other[meets].tolist(), strict=True))
    loose = np.setdiff1d(np.arange(len(ends)), end[meets])
    loose = loose[~_covered(plan, ends[loose])]
    findings = []
    for number in loose.tolist():
        point, own, far_end = shapely.Point(ends[number]), number // 2, number ^ 1
        near = tree.query(point, predicate="dwithin", distance=NEARLY_M)
        # a stub is near the wall it grows from; that is no gap
        near = [i for i in near.tolist() if i != own and (far_end, i) not in touching]
        if near:
            gaps = shapely.distance(lines[near], point)
            findings.append(_open_end(plan, ends[number], own, near[int(gaps.argmin())], float(gaps.min())))
    return findings


def _open_end(plan: FloorPlan, end: NDArray[np.float64], own: int, other: int, gap: float) -> Finding:
    x, y = map(float, end)
    message = (
        f"A {KINDS[plan.kind[own]]} (feature {plan.feature[own]}) ends at ({x:.2f}, {y:.2f}), {gap:.2f} m "
        f"short of feature {plan.feature[other]}."
    )
    advice = "Draw it up to the other if the gap is not there: rays of the plan pass through it."
    return Finding("warning", "open_end", message, (x, y), advice)


def _covered(plan: FloorPlan, points: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Whether each point [n 2] is inside a solid thing or in unmapped area."""
    areas = [shapely.Polygon(outline) for outline in (*plan.solids, *plan.unmapped)]
    covered = np.zeros(len(points), dtype=bool)
    covered[shapely.STRtree(areas).query(shapely.points(points), predicate="intersects")[0]] = True
    return covered


def _drawn_twice(plan: FloorPlan) -> list[Finding]:
    first, second, shared = _overlaps(plan)
    labels = np.stack([plan.kind, plan.state, plan.finish], axis=1)
    differ = (labels[first] != labels[second]).any(axis=1)
    cases: list[tuple[NDArray[np.bool_], Severity, str, str, str]] = [
        (differ, "warning", "conflicting_walls", "unlike in kind or finish", "Keep one of each pair."),
        (~differ, "note", "duplicate_walls", "alike", "Harmless, but one of each pair can go."),
    ]
    findings = []
    for which, severity, what, says, advice in cases:
        if which.any():
            i, j = first[which][0], second[which][0]
            x, y = map(float, plan.segments[i].reshape(2, 2).mean(axis=0))
            message = (
                f"{which.sum()} pairs of surfaces lie on each other, {says}, over "
                f"{shared[which].sum():.1f} m; the first at ({x:.2f}, {y:.2f}), "
                f"features {plan.feature[i]} and {plan.feature[j]}."
            )
            findings.append(Finding(severity, what, message, (x, y), advice))
    return findings


def _overlaps(plan: FloorPlan) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Pairs i < j of segments that lie on each other in sight, and the length they share (metres)."""
    rows = plan.segments
    lines = shapely.linestrings(rows.reshape(-1, 2, 2))
    i, j = shapely.STRtree(lines).query(lines, predicate="dwithin", distance=TOUCH_M)
    i, j = i[i < j], j[i < j]
    start, along = rows[i, :2], rows[i, 2:] - rows[i, :2]
    length = np.maximum(np.hypot(*along.T), 1e-12)
    along = along / length[:, None]
    ends = rows[j].reshape(-1, 2, 2) - start[:, None]
    place = np.einsum("pek,pk->pe", ends, along)
    off = np.abs(ends[..., 1] * along[:, None, 0] - ends[..., 0] * along[:, None, 1]).max(axis=1)
    low, high = np.maximum(place.min(axis=1), 0), np.minimum(place.max(axis=1), length)
    keep = np.flatnonzero((off < TOUCH_M) & (high - low > OVERLAP_M))
    # where two bodies abut, nobody ever sees what they share
    middle = start[keep] + along[keep] * ((low + high)[keep] / 2)[:, None]
    side = np.stack([-along[keep, 1], along[keep, 0]], axis=1) * 2 * TOUCH_M
    keep = keep[~(_covered(plan, middle + side) & _covered(plan, middle - side))]
    return i[keep], j[keep], (high - low)[keep]


def _narrow_doors(plan: FloorPlan, robot_width_m: float) -> list[Finding]:
    widths = _lengths(plan)
    findings = []
    for i in np.flatnonzero((plan.kind == DOOR) & (plan.state != SHUT) & (widths < robot_width_m)):
        x, y = map(float, plan.segments[i].reshape(2, 2).mean(axis=0))
        message = (
            f"The door at ({x:.2f}, {y:.2f}), feature {plan.feature[i]} ({DOOR_STATES[plan.state[i]]}), is "
            f"{widths[i]:.2f} m wide, the robot {robot_width_m:.2f} m."
        )
        findings.append(Finding("warning", "narrow_door", message, (x, y), "Check its width on site."))
    return findings

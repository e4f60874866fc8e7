"""A gallery of six-sided pods with slanted walls, in rows; outer walls cut the first and last row in half."""

from __future__ import annotations

from itertools import pairwise

from learnfilter.sim.families.sketch import Opening, Sketch

# How wide and high a slanted side is, as 3 to 4 (see Sketch.wall); it is 20 long.
RUN_DM, RISE_DM = 12, 16
# Where along it a door begins, and how wide the door is.
DOOR_DM = (5, 10)
FLAT_DM = (8, 14)
# Public ways, see offices.
AISLE_DM = (12, 18)

Wall = tuple[tuple[int, int], tuple[int, int]]


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=40, window_share=0.2)
    n_rows = depth // (2 * RISE_DM + AISLE_DM[0])
    for row in range(n_rows + 1):
        middle = depth * row // n_rows
        left = sketch.between(*AISLE_DM)
        right = left + 2 * RUN_DM + sketch.between(*FLAT_DM)
        while right + AISLE_DM[0] <= width:
            upper = _half(left, right, middle, RUN_DM, RISE_DM) if row < n_rows else []
            lower = _half(right, left, middle, -RUN_DM, -RISE_DM) if row > 0 else []
            _pod(sketch, [*upper, *lower])
            left = right + sketch.between(*AISLE_DM)
            right = left + 2 * RUN_DM + sketch.between(*FLAT_DM)


def _half(start: int, end: int, middle: int, run: int, rise: int) -> list[Wall]:
    """Three walls off the line from `start` to `end`: slanted, flat, slanted."""
    corners = [(start, middle), (start + run, middle + rise), (end - run, middle + rise), (end, middle)]
    return list(pairwise(corners))


def _pod(sketch: Sketch, walls: list[Wall]) -> None:
    """The walls of a pod, a slanted one of them with the door."""
    entrance = sketch.pick(*(i for i in range(len(walls)) if i % 3 != 1))
    door = Opening(*DOOR_DM, sketch.pick("gap", "open", "unknown"))
    for i, (start, end) in enumerate(walls):
        sketch.wall(start, end, *[door] * (i == entrance))

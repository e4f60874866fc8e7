"""An open hall with pillars, cupboards along its walls and a cabin in a corner."""

from __future__ import annotations

from itertools import pairwise

from learnfilter.sim.families.sketch import Sketch

PILLAR_DM = (4, 7)
BAY_DM = (36, 56)
MISSING_PILLAR_SHARE = 0.2
CUPBOARD_DEPTH_DM = (4, 8)
CUPBOARD_LENGTH_DM = (8, 24)
CABIN_DM = (26, 36)
STRETCH_DM = (26, 60)
CUPBOARD_SHARE = 0.5
CORNER_DM = 12


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=50, window_share=0.15)
    cabin_width, cabin_depth = sketch.between(*CABIN_DM), sketch.between(*CABIN_DM)
    x, y = width - cabin_width, cabin_depth
    sketch.wall((x, 0), (x, y), sketch.doorway(y, "gap", "open", "unknown"))
    sketch.wall((x, y), (width, y))
    _pillars(sketch, width, depth, x, y)
    _cupboards(sketch, width, depth)


def _pillars(sketch: Sketch, width: int, depth: int, cabin_x: int, cabin_y: int) -> None:
    """One pillar a bay corner, all of one size and finish, some left out; none near the cabin."""
    size, finish = sketch.between(*PILLAR_DM), sketch.finish()
    columns, rows = sketch.split(width, *BAY_DM)[1:-1], sketch.split(depth, *BAY_DM)[1:-1]
    for x in columns:
        for y in rows:
            beside_cabin = x + size + 12 > cabin_x and y < cabin_y + 12
            near_wall = min(x, y, width - x - size, depth - y - size) < 20
            if beside_cabin or near_wall or sketch.rng.random() < MISSING_PILLAR_SHARE:
                continue
            sketch.box(x, y, x + size, y + size, (finish, finish))


def _cupboards(sketch: Sketch, width: int, depth: int) -> None:
    """Cupboards against the left and the upper wall, clear of the corners."""
    for wall_length, on_left in ((depth, True), (width, False)):
        for a, b in pairwise(sketch.split(wall_length - 2 * CORNER_DM, *STRETCH_DM)):
            deep, length = sketch.between(*CUPBOARD_DEPTH_DM), sketch.between(*CUPBOARD_LENGTH_DM)
            start = CORNER_DM + a + sketch.between(0, b - a - length)
            finishes = (sketch.finish(), sketch.finish())
            if sketch.rng.random() >= CUPBOARD_SHARE:
                continue
            if on_left:
                sketch.box(0, start, deep, start + length, finishes)
            else:
                sketch.box(start, depth - deep, start + length, depth, finishes)

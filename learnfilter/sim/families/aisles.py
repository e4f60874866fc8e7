"""A store: rows of racks with aisles between, cross aisles at the ends, a small office in a corner."""

from __future__ import annotations

from itertools import pairwise

from learnfilter.sim.families.sketch import Sketch

RACK_DEPTH_DM = (8, 12)
RACK_LENGTH_DM = (20, 45)
AISLE_DM = (14, 24)
CROSS_AISLE_DM = (15, 22)
EMPTY_SHARE = 0.12
OFFICE_DM = (24, 34)


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=60)
    office_width, office_depth = sketch.between(*OFFICE_DM), sketch.between(*OFFICE_DM)
    x, y = width - office_width, depth - office_depth
    sketch.wall((x, y), (width, y), sketch.doorway(office_width, "gap", "open", "unknown"))
    sketch.wall((x, y), (x, depth))
    rack_finishes = (sketch.finish(), sketch.finish())
    left, right = sketch.between(*CROSS_AISLE_DM), width - sketch.between(*CROSS_AISLE_DM)
    bottom = sketch.pick(0, sketch.between(*AISLE_DM))  # the first row stands against the wall or not
    while True:
        rack_depth = sketch.between(*RACK_DEPTH_DM)
        top = bottom + rack_depth
        if top + AISLE_DM[0] > depth:
            return
        # a row beside the office stops a cross aisle short of it
        reaches = top + AISLE_DM[0] > y
        _row(sketch, left, x - CROSS_AISLE_DM[0] if reaches else right, bottom, top, rack_finishes)
        bottom = top + sketch.between(*AISLE_DM)


def _row(sketch: Sketch, left: int, right: int, bottom: int, top: int, finishes: tuple[int, int]) -> None:
    """Racks end to end, some missing, a passage across where the row is long."""
    cuts = sketch.split(right - left, *RACK_LENGTH_DM)
    passage = sketch.between(1, len(cuts) - 2) if len(cuts) > 3 else None
    for i, (a, b) in enumerate(pairwise(cuts)):
        a = a + CROSS_AISLE_DM[0] if i == passage else a
        if b - a >= RACK_DEPTH_DM[0] and sketch.rng.random() >= EMPTY_SHARE:
            ends = finishes[1] if sketch.rng.random() < 0.8 else sketch.finish()
            sketch.box(left + a, bottom, left + b, top, (finishes[0], ends))

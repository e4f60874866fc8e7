"""A store of equal racks in equal rows: every aisle looks like the next."""

from __future__ import annotations

from learnfilter.sim.families.sketch import Sketch

RACK_DEPTH_DM = (8, 12)
RACK_LENGTH_DM = (24, 36)
# Both as on other public ways; what is left over widens all of them alike.
AISLE_DM = (14, 20)
CROSS_AISLE_DM = (14, 20)
ODD_END_SHARE = 0.1


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    faces, ends = sketch.usual_finishes[:2]
    sketch.shell(width, depth, longest=60, finish=sketch.usual_finishes[2])
    rack_depth, cross_aisle = sketch.between(*RACK_DEPTH_DM), sketch.between(*CROSS_AISLE_DM)
    rows = depth // (rack_depth + sketch.between(*AISLE_DM))
    racks = (width - cross_aisle) // (sketch.between(*RACK_LENGTH_DM) + cross_aisle)
    row, rack = depth // rows, (width - cross_aisle) // racks  # with the aisle beside them
    for k in range(rows):
        bottom = k * row  # the first row stands against the wall, the last leaves an aisle
        for i in range(racks):
            end = sketch.finish() if sketch.rng.random() < ODD_END_SHARE else ends
            right = (i + 1) * rack
            sketch.box(right - rack + cross_aisle, bottom, right, bottom + rack_depth, (faces, end))

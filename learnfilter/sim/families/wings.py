"""A ward of two wings either side of a street: each wing is the other one, turned by half a turn.

Whatever a robot sees in one wing it sees in the other, so it stays in two minds for ever.
"""

from __future__ import annotations

from learnfilter.sim.families.offices import CORRIDOR_DM, row_of_rooms
from learnfilter.sim.families.sketch import Sketch

# Rows of rooms are at least so deep; a wing has as many corridors as that allows.
ROW_DEPTH_DM = 26
# Narrower than the corner room it stands in, by more than a robot.
CUPBOARD_LENGTH_DM = (9, 12)
CUPBOARD_DEPTH_DM = (4, 8)


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=40, window_share=0.3, sides=2)
    street = sketch.between(*CORRIDOR_DM)
    street += (depth - street) % 2  # so that both wings are whole decimetres deep
    _wing(sketch, width, (depth - street) // 2)
    sketch.repeat_turned(width, depth)


def _wing(sketch: Sketch, width: int, depth: int) -> None:
    """Rows of rooms, the last on the street; deep wings have corridors, and a passage from them to it."""
    corridor, passage = sketch.between(*CORRIDOR_DM), sketch.between(*CORRIDOR_DM)
    n_corridors = (depth - ROW_DEPTH_DM) // (2 * ROW_DEPTH_DM + corridor)
    n_rows = 2 * n_corridors + 1
    row_depth = (depth - n_corridors * corridor) // n_rows
    left = sketch.between(width // 4, 3 * width // 4 - passage)
    blocks = [(0, left), (left + passage, width)] if n_corridors else [(0, width)]
    bottom = 0
    for row in range(n_rows):
        faces_up = row % 2 == 0
        top = depth if row == n_rows - 1 else bottom + row_depth
        for start, end in blocks:
            row_of_rooms(sketch, start, end, bottom, top, top if faces_up else bottom)
            if not faces_up:
                sketch.wall((start, top), (end, top))
        if n_corridors:
            sketch.wall((left, bottom), (left, top))
            sketch.wall((left + passage, bottom), (left + passage, top))
        bottom = top + corridor if faces_up else top
    length, deep = sketch.between(*CUPBOARD_LENGTH_DM), sketch.between(*CUPBOARD_DEPTH_DM)
    sketch.box(0, 0, length, deep, (sketch.finish(), sketch.finish()))

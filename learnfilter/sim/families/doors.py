"""Rooms of one size behind doors of one kind, off corridors folded side by side: hardly one can be told.

The corridors meet in a lobby at one end.  One partition of all stands elsewhere, and a few have another
finish; the rest is alike, and alike again when turned by half a turn in its corridor.
"""

from __future__ import annotations

from itertools import pairwise

from learnfilter.sim.families.sketch import Sketch

CORRIDOR_DM = (14, 18)
ROOM_DM = (22, 28)
LOBBY_DM = 15
# A corridor and the rooms on both of its sides.
BAND_DEPTH_DM = 58
# How far the odd partition stands off.
ODD_DM = 5
ACCENT_SHARE = 0.05


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    plain = sketch.usual_finishes[1]
    sketch.shell(width, depth, longest=max(width, depth), finish=plain)
    n_bands = depth // BAND_DEPTH_DM
    levels = [depth * k // n_bands for k in range(n_bands + 1)]
    n_rooms = (width - LOBBY_DM) // sketch.between(*ROOM_DM)
    room_width = (width - LOBBY_DM) // n_rooms
    room_depth = (depth // n_bands - sketch.between(*CORRIDOR_DM)) // 2
    filling = sketch.pick("open", "unknown", shares=(0.75, 0.25))
    door = sketch.doorway(room_width - ODD_DM, filling)
    odd_row, odd_cut = sketch.between(0, 2 * n_bands - 1), sketch.between(1, n_rooms - 1)
    for row in range(2 * n_bands):
        cuts = [
            room_width * i + (ODD_DM if (row, i) == (odd_row, odd_cut) else 0) for i in range(n_rooms + 1)
        ]
        level = levels[(row + 1) // 2]
        front = level + room_depth if row % 2 == 0 else level - room_depth
        for a, b in pairwise(cuts):
            ends = ((a, front), (b, front)) if row % 2 == 0 else ((b, front), (a, front))
            sketch.wall(*ends, door, finish=sketch.usual_finishes[0])
        for cut in cuts[1:]:
            finish = sketch.finish() if sketch.rng.random() < ACCENT_SHARE else plain
            sketch.wall((cut, min(level, front)), (cut, max(level, front)), finish=finish)
    for level in levels[1:-1]:
        sketch.wall((0, level), (room_width * n_rooms, level), finish=plain)

"""Rooms off a corridor; deep buildings have several corridors, joined by one that crosses them."""

from __future__ import annotations

from itertools import pairwise

from learnfilter.sim.families.sketch import Sketch

# Public corridors are at least 1118 mm wide (IBC corridor-width table).
CORRIDOR_DM = (14, 22)
BAND_DEPTH_DM = 140
ROOM_DM = (24, 46)
DOORS = ("gap", "open", "unknown", "shut")
DOOR_SHARES = (0.2, 0.5, 0.24, 0.06)
THROUGH_SHARE = 0.25


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=40, window_share=0.3)
    n_bands = max(1, round(depth / BAND_DEPTH_DM))
    levels = [depth * k // n_bands for k in range(n_bands + 1)]
    crossing = sketch.between(*CORRIDOR_DM)
    left = sketch.between(width // 4, 3 * width // 4 - crossing)
    right = left + crossing
    blocks = [(0, width)] if n_bands == 1 else [(0, left), (right, width)]
    for bottom, top in pairwise(levels):
        corridor = sketch.between(*CORRIDOR_DM)
        space = top - bottom - corridor
        below = bottom + sketch.between(space * 2 // 5, space * 3 // 5)
        above = below + corridor
        for lower, upper, front in ((bottom, below, below), (above, top, above)):
            for start, end in blocks:
                row_of_rooms(sketch, start, end, lower, upper, front)
            if n_bands > 1:
                sketch.wall((left, lower), (left, upper))
                sketch.wall((right, lower), (right, upper))
    for level in levels[1:-1]:
        for start, end in blocks:
            sketch.wall((start, level), (end, level))


def row_of_rooms(sketch: Sketch, left: int, right: int, bottom: int, top: int, front: int) -> None:
    """A row of rooms with doors in the wall at height `front`, some with a door to the next room."""
    cuts = sketch.split(right - left, *ROOM_DM)
    for a, b in pairwise(cuts):
        door = sketch.doorway(b - a, *DOORS, shares=DOOR_SHARES)
        sketch.wall((left + a, front), (left + b, front), door)
    for cut in cuts[1:-1]:
        joined = sketch.rng.random() < THROUGH_SHARE
        doors = [sketch.doorway(top - bottom, "gap", "open", "unknown")] if joined else []
        sketch.wall((left + cut, bottom), (left + cut, top), *doors)

"""A maze of partitions: space split again and again by walls with one or two openings."""

from __future__ import annotations

from learnfilter.sim.families.sketch import JAMB_DM, Sketch

SMALLEST_DM = 16
ALWAYS_SPLIT_DM = 52
STOP_SHARE = 0.25
SECOND_OPENING_SHARE = 0.3
SECOND_OPENING_DM = 60

# An opening in a wall: axis the wall runs along, the wall's place on the other axis, from, to.
Hole = tuple[int, int, int, int]


def draw(sketch: Sketch, width: int, depth: int) -> None:
    """Draw it, sizes in decimetres."""
    sketch.shell(width, depth, longest=40, window_share=0.1)
    holes: list[Hole] = []
    rooms = [(0, 0, width, depth)]
    while rooms:
        rooms.extend(_split(sketch, rooms.pop(), holes))


def _split(sketch: Sketch, room: tuple[int, int, int, int], holes: list[Hole]) -> list:
    """Put a wall across a room and return the two rooms, or none if it stays whole."""
    low, high = room[:2], room[2:]
    size = (high[0] - low[0], high[1] - low[1])
    axis = int(size[1] > size[0])  # the wall crosses this axis: the longer one
    other = 1 - axis
    if size[axis] < ALWAYS_SPLIT_DM and sketch.rng.random() < STOP_SHARE:
        return []
    places = [
        at
        for at in range(low[axis] + SMALLEST_DM, high[axis] - SMALLEST_DM + 1)
        if not _meets_hole(axis, at, low[other], high[other], holes)
    ]
    if not places:
        return []
    at = places[sketch.between(0, len(places) - 1)]
    length = size[other]
    openings = [sketch.doorway(length, "gap", "open", "unknown", shares=(0.6, 0.3, 0.1))]
    if length >= SECOND_OPENING_DM and sketch.rng.random() < SECOND_OPENING_SHARE:
        second = sketch.doorway(length, "gap", "open", "unknown", "shut")
        first = openings[0]
        if second.at > first.at + first.width + JAMB_DM or second.at + second.width + JAMB_DM < first.at:
            openings.append(second)
    holes.extend((other, at, low[other] + o.at, low[other] + o.at + o.width) for o in openings)
    start, end = ((at, low[1]), (at, high[1])) if axis == 0 else ((low[0], at), (high[0], at))
    sketch.wall(start, end, *openings)
    return [(*low, *end), (*start, *high)]


def _meets_hole(axis: int, at: int, low: int, high: int, holes: list[Hole]) -> bool:
    """Whether a wall at this place, from `low` to `high`, would end in an opening or leave it no jamb."""
    return any(
        along == axis and where in (low, high) and start - JAMB_DM < at < end + JAMB_DM
        for along, where, start, end in holes
    )

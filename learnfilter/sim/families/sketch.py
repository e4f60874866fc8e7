"""Draw an invented plan in whole decimetres.

Lengths are multiples of the basic module, 100 mm (ISO 21723:2019), so families compute in integers;
nothing rounds.  Doors are at least 815 mm wide (ADA 2010, 404.2.3), which in whole modules is 900 mm.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from learnfilter.plan.floorplan import (
    DOOR,
    NO_FINISH,
    OPEN,
    SHUT,
    SOLID,
    UNKNOWN,
    WALL,
    WINDOW,
    Finish,
    FloorPlan,
)

NARROWEST_DOOR_DM = 9
WIDEST_DOOR_DM = 12
# A jamb: how far a door keeps from the end of its wall.
JAMB_DM = 2
ACCENT_SHARE = 0.12
# The first so many colours of a palette cover whole walls; the rest are doors and accents.
N_COMMON = 8
# What stands in an opening: nothing, or a door in some state, or a window.
FILLINGS = {
    "gap": None,
    "open": (DOOR, OPEN),
    "shut": (DOOR, SHUT),
    "unknown": (DOOR, UNKNOWN),
    "window": (WINDOW, SHUT),
}


@dataclass(frozen=True)
class Opening:
    """A hole in a wall: where it begins along the wall, how wide it is (decimetres), what fills it."""

    at: int
    width: int
    filling: str


@dataclass
class Sketch:
    """Collects walls, openings and solid things of one plan.

    Each site repeats three finishes over most of its walls, has one for doors, and a few accents.
    """

    rng: np.random.Generator
    palette: tuple[Finish, ...]
    segments: list[tuple[int, int, int, int]] = field(default_factory=list)
    rows: list[tuple[int, int, int, int]] = field(default_factory=list)  # kind, state, finish, feature
    solids: list[np.ndarray] = field(default_factory=list)
    features: int = 0

    def __post_init__(self):
        order = [int(i) for i in self.rng.permutation(N_COMMON)]
        self.usual_finishes = order[:3]
        self.door_finish = self.pick(*order[3:], *range(N_COMMON, len(self.palette)))

    def pick(self, *choices, shares=None):
        """One of the choices."""
        return choices[int(self.rng.choice(len(choices), p=shares))]

    def between(self, low: int, high: int) -> int:
        """A whole number in [low, high], or `low` where the interval is empty."""
        return int(self.rng.integers(low, high + 1)) if high > low else low

    def finish(self) -> int:
        """Finish of one stretch of wall: mostly one of the site's three, now and then an accent."""
        if self.rng.random() < ACCENT_SHARE:
            return int(self.rng.integers(len(self.palette)))
        return self.pick(*self.usual_finishes, shares=(0.5, 0.3, 0.2))

    def doorway(self, length: int, *fillings: str, shares=None) -> Opening:
        """A door or gap somewhere in a wall of this length."""
        width = min(self.between(NARROWEST_DOOR_DM, WIDEST_DOOR_DM), length - 2 * JAMB_DM)
        at = self.between(JAMB_DM, length - JAMB_DM - width)
        return Opening(at, width, self.pick(*fillings, shares=shares))

    def wall(
        self, start: tuple[int, int], end: tuple[int, int], *openings: Opening, finish: int | None = None
    ) -> None:
        """A straight wall, cut by openings; one finish, drawn where none is given.

        It runs along an axis, or obliquely along (3, 4) or (4, 3) with openings at multiples of 5: there
        too every length and every coordinate is whole.
        """
        finish = self.finish() if finish is None else finish
        (x0, y0), (x1, y1) = start, end
        dx, dy = x1 - x0, y1 - y0
        length = math.isqrt(dx * dx + dy * dy)

        def at(along: int) -> tuple[int, int]:
            return x0 + dx * along // length, y0 + dy * along // length

        def piece(a: int, b: int, kind: int, state: int, finish: int) -> None:
            if b > a:
                self.segments.append((*at(a), *at(b)))
                self.rows.append((kind, state, finish, self.features))

        done = 0
        for opening in sorted(openings, key=lambda o: o.at):
            piece(done, opening.at, WALL, SHUT, finish)
            done = opening.at + opening.width
            filling = FILLINGS[opening.filling]
            if filling is not None:
                self.features += 1
                kind = filling[0]
                piece(opening.at, done, *filling, self.door_finish if kind == DOOR else finish)
                self.features += 1
        piece(done, length, WALL, SHUT, finish)
        self.features += 1

    def box(self, left: int, bottom: int, right: int, top: int, finishes: tuple[int, int]) -> None:
        """A solid rectangle: finish of its long sides and of its ends."""
        corners = [(left, bottom), (right, bottom), (right, top), (left, top)]
        along_x = right - left >= top - bottom
        for i, corner in enumerate(corners):
            self.segments.append((*corner, *corners[(i + 1) % 4]))
            is_end = (i % 2 == 1) == along_x
            self.rows.append((SOLID, SHUT, finishes[is_end], self.features))
        self.solids.append(np.array(corners))
        self.features += 1

    def shell(
        self,
        width: int,
        depth: int,
        longest: int,
        window_share: float = 0.0,
        *,
        sides: int = 4,
        finish: int | None = None,
    ) -> None:
        """The outer walls, in stretches no longer than `longest`, some with a window.

        The first so many of bottom, right, top and left; finishes as for `wall`.
        """
        corners = [(0, 0), (width, 0), (width, depth), (0, depth)]
        for i, (x0, y0) in enumerate(corners[:sides]):
            x1, y1 = corners[(i + 1) % 4]
            length = abs(x1 - x0) + abs(y1 - y0)
            cuts = [length * k // -(-length // longest) for k in range(-(-length // longest) + 1)]
            ux, uy = (x1 - x0) // length, (y1 - y0) // length
            for a, b in pairwise(cuts):
                glazed = b - a >= 16 and self.rng.random() < window_share
                windows = [Opening((b - a) // 4, (b - a) // 2, "window")] if glazed else []
                self.wall((x0 + ux * a, y0 + uy * a), (x0 + ux * b, y0 + uy * b), *windows, finish=finish)

    def repeat_turned(self, width: int, depth: int) -> None:
        """Draw all that was drawn once more, turned by half a turn about the middle of the site."""
        self.segments += [(width - a, depth - b, width - c, depth - d) for a, b, c, d in self.segments]
        self.rows += [(kind, state, finish, n + self.features) for kind, state, finish, n in self.rows]
        self.solids += [np.array([width, depth]) - outline for outline in self.solids]
        self.features *= 2

    def split(self, length: int, shortest: int, longest: int) -> list[int]:
        """Cut points 0 ... length of pieces in [shortest, longest], as far as the length allows."""
        cuts, at = [0], 0
        while length - at > longest:
            at += self.between(shortest, min(longest, length - at - shortest))
            cuts.append(at)
        return [*cuts, length]

    def plan(self, name: str, with_finishes: bool) -> FloorPlan:
        """What was drawn, in metres."""
        kind, state, finish, feature = np.array(self.rows).T
        return FloorPlan(
            segments=np.array(self.segments) / 10,
            kind=kind,
            state=state,
            finish=finish if with_finishes else np.full(len(finish), NO_FINISH),
            feature=feature,
            finishes=self.palette if with_finishes else (),
            solids=tuple(outline / 10 for outline in self.solids),
            name=name,
        )

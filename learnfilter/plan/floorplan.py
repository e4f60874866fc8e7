"""The floor plan as plain arrays: every other room reads this and nothing of the file it came from.

Units are metres in the site frame (x right, y up).  A plan is immutable; edits make a new one.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

# What a segment is.  Order is part of the arrays' meaning; append only.
WALL, SOLID, DOOR, WINDOW = range(4)
KINDS = ("wall", "solid", "door", "window")
# Where a door stands (every other kind is SHUT: it is what it is).
OPEN, SHUT, UNKNOWN = range(3)
DOOR_STATES = ("open", "shut", "unknown")
NO_FINISH = -1


@dataclass(frozen=True)
class Finish:
    """A surface's name and colour, sRGB in [0, 1]."""

    name: str
    srgb: tuple[float, float, float]


def _frozen(array: NDArray[Any]) -> NDArray[Any]:
    array = np.ascontiguousarray(array)
    array.setflags(write=False)
    return array


def closed(ring: NDArray[np.float64]) -> NDArray[np.float64]:
    """A ring [k 2] that ends where it starts."""
    return ring if np.array_equal(ring[0], ring[-1]) else np.vstack([ring, ring[:1]])


@dataclass(frozen=True, eq=False)
class FloorPlan:
    """Segments with what they are.

    Attributes:
        segments: [n 4] float64, x0 y0 x1 y1 in metres.
        kind: [n] int8 into KINDS.
        state: [n] int8 into DOOR_STATES; SHUT for anything but a door.
        finish: [n] int16 into `finishes`; NO_FINISH where the plan does not say.
        feature: [n] int32, which feature of the file the segment came from (for messages).
        finishes: colours named by the plan.
        solids: closed outlines [k 2] (the first point again at the end) of solid things, in whose
            inside nobody can stand.
        unmapped: closed outlines [k 2] of area the plan does not know: rays stop there without
            evidence, and nobody can stand there.
        seed: a point (x_m, y_m) known to be on the robot's floor, or None.
        origin: (longitude, latitude) in degrees that the frame's (0, 0) stands for, or None.
        name: for titles.
    """

    segments: NDArray[np.float64]
    kind: NDArray[np.int8]
    state: NDArray[np.int8]
    finish: NDArray[np.int16]
    feature: NDArray[np.int32]
    finishes: tuple[Finish, ...] = ()
    solids: tuple[NDArray[np.float64], ...] = ()
    unmapped: tuple[NDArray[np.float64], ...] = ()
    seed: tuple[float, float] | None = None
    origin: tuple[float, float] | None = None
    name: str = "plan"
    units: str = field(default="m", init=False)

    def __post_init__(self) -> None:
        n = len(self.segments)
        object.__setattr__(self, "segments", _frozen(np.asarray(self.segments, np.float64).reshape(n, 4)))
        for key, dtype in (
            ("kind", np.int8),
            ("state", np.int8),
            ("finish", np.int16),
            ("feature", np.int32),
        ):
            object.__setattr__(self, key, _frozen(np.asarray(getattr(self, key), dtype).reshape(n)))
        for key in ("solids", "unmapped"):
            outlines = tuple(_frozen(closed(np.asarray(o, np.float64))) for o in getattr(self, key))
            object.__setattr__(self, key, outlines)

    @cached_property  # asked for once an outline, and a scanned floor has outlines by the thousand
    def bounds(self) -> tuple[float, float, float, float]:
        """left, bottom, right, top in metres."""
        xy = self.segments.reshape(-1, 2)
        (left, bottom), (right, top) = xy.min(axis=0), xy.max(axis=0)
        return float(left), float(bottom), float(right), float(top)

    @property
    def has_finishes(self) -> bool:
        """Whether any surface has a known colour; without it the plan serves depth only."""
        return bool((self.finish >= 0).any())

    def content_hash(self) -> str:
        """SHA-256 of all that changes what a robot sees (not the name)."""
        digest = hashlib.sha256()
        labels: tuple[NDArray[Any], ...] = (self.kind, self.state, self.finish)
        for array in (self.segments, *labels, *self.solids, *self.unmapped):
            digest.update(str(array.shape).encode())
            digest.update(array.tobytes())
        digest.update(repr((self.finishes, self.seed)).encode())
        return digest.hexdigest()

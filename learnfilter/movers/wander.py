"""Wander: straight ahead while there is room, turn away where there is none.

No map, no belief, no memory but the side it last turned to.  It is what every other mover is
measured against.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from learnfilter.movers.contract import Situation
from learnfilter.runtime.moves import (
    MOTIONS,
    Footprint,
    Motion,
    check_motions,
    clear_motions,
    free_range,
)

ROOM_M = 3.0  # more room ahead than this attracts no more: less makes it shy of nothing but walls
STRAIGHT = 3.0  # how much more a straight motion is liked; at one it zigzags, far above it never explores


@dataclass
class Wander:
    """A mover that explores.

    Attributes:
        motions: to choose from; among them a turn on the spot to either side.
        footprint: the robot.
    """

    motions: tuple[Motion, ...] = MOTIONS
    footprint: Footprint = Footprint()  # noqa: RUF009 - immutable
    _side: float = field(default=0.0, init=False, repr=False)  # of the turn that goes on; 0 while it travels

    def __post_init__(self) -> None:
        check_motions(self.motions)

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """See `Mover.next`."""
        depth_m, bearings_rad = situation.depth_m, situation.bearings_rad
        clear = clear_motions(self.motions, depth_m, bearings_rad, self.footprint)
        ways = [m for m, free in zip(self.motions, clear, strict=True) if free and m.travels]
        if ways:
            self._side = 0.0
            weight = np.array([self._liking(m, depth_m, bearings_rad) for m in ways])
            return ways[rng.choice(len(ways), p=weight / weight.sum())]
        if not self._side:
            self._side = _roomier_side(depth_m, bearings_rad, rng)
        turns = [m for m in self.motions if not m.travels and np.sign(m.turn_rad) == self._side]
        return turns[rng.integers(len(turns))]

    def _liking(self, motion: Motion, depth_m: NDArray, bearings_rad: NDArray) -> float:
        """Length of the motion times the room it then faces."""
        facing = np.array([motion.turn_rad - self.footprint.mount[2]])
        room = min(float(free_range(facing, depth_m, bearings_rad)[0][0]), ROOM_M)
        return motion.length_m * (room + 1e-3) * (STRAIGHT if motion.turn_rad == 0 else 1.0)


def _roomier_side(depth_m: NDArray, bearings_rad: NDArray, rng: np.random.Generator) -> float:
    """1 for left, -1 for right: where the strip shows more room; drawn where it shows the same."""
    shown, middle = np.nan_to_num(depth_m), (bearings_rad[0] + bearings_rad[-1]) / 2
    more = shown[bearings_rad > middle].sum() - shown[bearings_rad < middle].sum()
    return float(np.sign(more)) if more else float(rng.choice([-1.0, 1.0]))

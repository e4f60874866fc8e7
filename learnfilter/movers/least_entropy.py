"""Least entropy: the motion after which the belief is expected to be surest.

For every clear motion the filter's own belief is carried along; each mode in turn is taken to be true, the
plan says what the robot would then see, and the filter weighs that.  What is left of the entropy is
averaged over the modes by their belief.  It weighs motions x modes strips a decision, so it is slow: it
is the criterion that the policy learns to do without.

Source: Fox, Burgard, Thrun 1998, "Active Markov localization for mobile robots"; Thrun, Burgard, Fox
2005, ch. 17.  That views are expected at the modes alone, and without the sensor's noise, is ours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from learnfilter.core.estimate import entropy
from learnfilter.movers.contract import Situation
from learnfilter.movers.entropy import greedy
from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.moves import MOTIONS, Footprint, Motion, check_motions, clear_motions


@dataclass(frozen=True)
class LeastEntropy:
    """A mover that looks one motion ahead.

    Attributes:
        motions: to choose from; among them a turn on the spot to either side.
        footprint: the robot.
        price_nats_per_m, price_nats_per_rad: entropy that a metre or a radian must save.
    """

    motions: tuple[Motion, ...] = MOTIONS
    footprint: Footprint = Footprint()  # noqa: RUF009 - immutable
    price_nats_per_m: float = 0.1
    price_nats_per_rad: float = 0.02

    def __post_init__(self) -> None:
        check_motions(self.motions)

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """See `Mover.next`."""
        clear = clear_motions(self.motions, situation.depth_m, situation.bearings_rad, self.footprint)
        motions = [motion for motion, free in zip(self.motions, clear, strict=True) if free]
        left = np.array([self.expected(situation.localizer, motion) for motion in motions])
        return motions[greedy(-left, [self._price(motion) for motion in motions], rng)]

    def expected(self, localizer: Localizer, motion: Motion) -> float:
        """Nats expected to be left of the belief after a motion and the strip that follows it."""
        moved, scale = localizer.foresee(motion), localizer.scale
        share = [mode.mass for mode in localizer.modes]
        strips = zip(*localizer.promised(motion), strict=True)
        left = [entropy(scale.weigh(moved, depth_m, rgb)[0].planes) for depth_m, rgb in strips]
        return float(np.average(left, weights=share))

    def _price(self, motion: Motion) -> float:
        return self.price_nats_per_m * motion.length_m + self.price_nats_per_rad * abs(motion.turn_rad)

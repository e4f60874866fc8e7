"""The one contract of movers: who decides where the robot goes next."""

from __future__ import annotations

from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.moves import Motion


class Situation(NamedTuple):
    """What a mover decides from.

    Attributes:
        depth_m: [w] range along each bearing of the present strip, NaN where nothing came back.
        bearings_rad: [w] sensor-frame bearings, increasing.
        localizer: the filter that the robot runs; it has taken in the present strip.
        last: the motion before this strip; None at the start.
    """

    depth_m: NDArray[np.floating]
    bearings_rad: NDArray[np.floating]
    localizer: Localizer
    last: Motion | None


class Mover(Protocol):
    """Decides the robot's next motion; only one that `clear_motions` lets through."""

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """The next motion of the robot.

        Args:
            situation: what is seen and believed.
            rng: draws where the choice is free.
        """
        ...

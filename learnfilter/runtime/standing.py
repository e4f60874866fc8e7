"""Whether a robot may trust its pose, searches for it, or has lost it."""

from __future__ import annotations

from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.estimate import Mode, mass_near
from learnfilter.core.grid import PoseGrid
from learnfilter.core.lock import Lock
from learnfilter.core.poses import compose

State = Literal["searching", "locked", "lost"]
BELIEVED = 0.05  # a locked pose with less of the belief near it has been given up; one strip may take most


class Standing(NamedTuple):
    """Decided strip by strip, without looking ahead.

    Attributes:
        lock: strips running with nearly all mass near the best mode.
        pose: [3] of the sensor when last locked, carried by odometry; None before the first lock.
        lost: whether a locked pose was given up, or an alarm was given, since the last lock.
        anew: whether that happened at this strip: then the search must begin anew with it.
    """

    lock: Lock = Lock()
    pose: NDArray[np.float64] | None = None
    lost: bool = False
    anew: bool = False

    @property
    def state(self) -> State:
        return "locked" if self.lock.held else "lost" if self.lost else "searching"

    def after(
        self, best: Mode, motion: NDArray[np.float64], belief: NDArray, grid: PoseGrid, alarmed: bool
    ) -> Standing:
        """The standing after one more weighed strip.

        Args:
            best: heaviest mode of the belief.
            motion: [3] the sensor's since the strip before.
            belief: [h r c] after the strip.
            grid: its lattice.
            alarmed: whether surprises have added up to an alarm.
        """
        pose = None if self.pose is None else compose(self.pose, motion)
        if alarmed or (pose is not None and mass_near(belief, grid, pose) < BELIEVED):
            return Standing(lost=True, anew=True)
        lock = self.lock.after(best.mass)
        return Standing(lock, best.pose) if lock.held else Standing(lock, pose, self.lost)

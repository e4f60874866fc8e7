"""When a robot may trust its pose: decided causally, strip by strip."""

from __future__ import annotations

from dataclasses import dataclass

# One strip may flatter a wrong mode, three running after movement seldom do.
LOCK_MASS = 0.9
LOCK_STRIPS = 3


@dataclass(frozen=True)
class Lock:
    """Decides, strip by strip and without looking ahead, whether the robot may trust its pose.

    Attributes:
        running: weighed strips in a row, up to the last, with enough mass near the best mode.
    """

    running: int = 0

    @property
    def held(self) -> bool:
        return self.running >= LOCK_STRIPS

    def after(self, mass_near_mode: float) -> Lock:
        """The state after one more weighed strip.

        Args:
            mass_near_mode: belief within 0.5 m and 15 degrees of the best mode's mean, in [0, 1].
        """
        return Lock(self.running + 1 if mass_near_mode >= LOCK_MASS else 0)

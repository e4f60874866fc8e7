"""A trained mover as a bundle holds it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.runtime.mover import PREFIX, mover_facts
from learnfilter.runtime.moves import Footprint, Motion


class ShippedMover(NamedTuple):
    """A policy to ship.

    Attributes:
        weights: by name, see `runtime.policy.RobotPolicy`.
        motions: it chooses from.
        footprint: the robot.
        seed: of its training.
        config_sha256: digest of the settings it was trained with.
    """

    weights: Mapping[str, NDArray[np.float32]]
    motions: tuple[Motion, ...]
    footprint: Footprint
    seed: int
    config_sha256: str

    def facts(self) -> dict[str, Any]:
        """Member `mover` of the manifest."""
        own = {"seed": self.seed, "config_sha256": self.config_sha256}
        return mover_facts(self.motions, self.footprint) | own

    def arrays(self) -> dict[str, NDArray[np.float32]]:
        """Its share of the weights.  A few thousand numbers stay float32 at any precision."""
        return {f"{PREFIX}.{name}": array for name, array in self.weights.items()}

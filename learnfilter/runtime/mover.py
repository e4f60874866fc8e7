"""The mover of a bundle: a policy, the motions it chooses from and the robot it keeps clear."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.moves import Footprint, Motion, check_motions
from learnfilter.runtime.outlook import MODES, SECTORS
from learnfilter.runtime.policy import FAR_M, LAYERS, RobotPolicy

PREFIX = "policy"  # of its arrays among a bundle's weights


@dataclass(frozen=True, eq=False)
class RobotMover:
    """A checked mover.

    Attributes:
        policy: scores the motions.
        motions: to choose from.
        footprint: the robot.
    """

    policy: RobotPolicy
    motions: tuple[Motion, ...]
    footprint: Footprint

    @classmethod
    def read(cls, facts: Mapping[str, Any], mount: tuple[float, float, float], arrays: Arrays) -> RobotMover:
        """From the manifest's member `mover`, the sensor's place on the robot and the bundle's weights.

        Raises:
            BundleError: an array is missing or has another shape.
            ConfigError: a blocked robot could not turn away, or the footprint cannot be.
        """
        motions = tuple(Motion(**motion) for motion in facts["motions"])
        check_motions(motions)
        footprint = Footprint(mount=mount, **facts["footprint"])
        return cls(RobotPolicy(arrays.under(PREFIX)), motions, footprint)


def mover_facts(motions: Sequence[Motion], footprint: Footprint) -> dict[str, Any]:
    """What the manifest says of a mover, but for where it comes from."""
    return {
        "kind": "policy",
        "motions": [motion._asdict() for motion in motions],
        "footprint": {key: getattr(footprint, key) for key in ("radius_m", "clearance_m", "skirt_m")},
        "modes": MODES,
        "sectors": SECTORS,
        "far_m": FAR_M,
        "layers": [
            {"name": name, "inputs": inputs, "outputs": outputs, "then": then}
            for name, inputs, outputs, then in LAYERS
        ],
    }

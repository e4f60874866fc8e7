"""What happened while a mover led a robot from one start."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray


class EpisodeRecord(NamedTuple):
    """What happened from one start, strip by strip [t].

    Attributes:
        reference: [t 3] true pose of the robot, as it reads on the plan.
        estimate: [t 3] of the filter.
        right: whether the estimate is near the reference.
        state: 'searching', 'locked' or 'lost'.
        mass: belief near the estimate.
        entropy: nats of the belief.
        near_truth: belief near the true pose, after the last weighed strip.
        motion: [t 3] chosen there; the last one was not made.
        decision_s: seconds that the choice took.
        metres, radians: travelled and turned so far, in truth.
        contacts: motions so far that ended at a wall or a thing.
        people_touched: motions so far on which the robot came too near to somebody.
    """

    reference: NDArray[np.float64]
    estimate: NDArray[np.float64]
    right: NDArray[np.bool_]
    state: NDArray[np.str_]
    mass: NDArray[np.float64]
    entropy: NDArray[np.float64]
    near_truth: NDArray[np.float64]
    motion: NDArray[np.float64]
    decision_s: NDArray[np.float64]
    metres: NDArray[np.float64]
    radians: NDArray[np.float64]
    contacts: NDArray[np.int64]
    people_touched: NDArray[np.int64]

    @property
    def locked_at(self) -> int | None:
        """The strip at which the robot first trusted its pose; None if it never did."""
        held = np.flatnonzero(self.state == "locked")
        return int(held[0]) if len(held) else None

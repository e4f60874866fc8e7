"""From the belief over sensor poses to what a robot asks: where is my base, and how sure is that."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.estimate import Mode
from learnfilter.core.poses import compose, inverse
from learnfilter.runtime.motion import MotionNoise
from learnfilter.runtime.standing import State


class Estimate(NamedTuple):
    """Answer to one step.

    Attributes:
        pose: [3] x_m, y_m, heading_rad of the robot's base: mean of the best mode, carried through the
            motion since the last weighed strip.
        covariance: [3 3] of that mode about its mean, same units.
        mass: belief within 0.5 m and 15 degrees of the best mode's mean, after the last weighed strip.
        entropy: of the belief, nats.
        modes: separate modes, heaviest first, carried like the pose, which is the first one's.
        state: 'locked' after three weighed strips running with 0.9 of the mass near the best mode;
            'lost' from an alarm, or when a locked pose is given up, until the next lock; else 'searching'.
        weighed: whether this step's strip was weighed.
        log_evidence: nats of the last weighed strip given those before, up to the model's constant.
        surprise: p-value of the last weighed strip where the plan is true, small where it surprises; NaN
            without a calibrated watch.
        alarm: whether this step's strip gave an alarm: surprises have added up.
        anew: whether the search began anew with it, after an alarm or because a locked pose was given up.
    """

    pose: NDArray[np.float64]
    covariance: NDArray[np.float64]
    mass: float
    entropy: float
    modes: tuple[Mode, ...]
    state: State
    weighed: bool
    log_evidence: float
    surprise: float
    alarm: bool
    anew: bool


def base_mode(mode: Mode, pending: NDArray, mount: NDArray, noise: MotionNoise) -> Mode:
    """A mode of the sensor's pose as one of the base's.

    Args:
        mode: of the sensor, at the last weighed strip.
        pending: [3] the sensor's motion since then.
        mount: [3] pose of the sensor on the robot.
        noise: of odometry, which widens the covariance by what is pending.
    """
    motion = compose(pending, inverse(mount))
    cos, sin = np.cos(mode.pose[2]), np.sin(mode.pose[2])
    turn_moves = np.eye(3)  # how heading errors displace what lies ahead
    turn_moves[:2, 2] = [-sin * motion[0] - cos * motion[1], cos * motion[0] - sin * motion[1]]
    travel, turn = noise.variances(pending)
    covariance = turn_moves @ mode.covariance @ turn_moves.T + np.diag([travel, travel, turn])
    return Mode(compose(mode.pose, motion), mode.mass, covariance)

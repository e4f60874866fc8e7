"""What the wheels report of a drive.

The four numbers are standard deviations a unit of motion; their parts are independent, so variances
add.  Turn: (turn_from_turn |turn|)^2 + (turn_from_travel travel)^2.  Travel, along and across alike:
(travel_from_travel travel)^2 + (travel_from_turn |turn|)^2.  A robot that stands reports no motion.

Source: the parts are those of Thrun, Burgard, Fox 2005, ch. 5; here on (forward, left, turn).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.poses import between, wrap


@dataclass(frozen=True)
class OdometryNoise:
    """Standard deviations: radians a radian, radians a metre, metres a metre, metres a radian."""

    turn_from_turn: float = 0.05
    turn_from_travel: float = 0.02
    travel_from_travel: float = 0.05
    travel_from_turn: float = 0.01


def measure_odometry(
    poses: NDArray[np.float64],
    rng: np.random.Generator,
    noise: OdometryNoise | None = None,
    *,
    noise_scale: float = 1.0,
    travel_scale: float = 1.0,
) -> NDArray[np.float64]:
    """Odometry of a driven way.

    Args:
        poses: [t 3] true poses of the robot.
        rng: draws the noise.
        noise: its spreads, the usual ones if None.
        noise_scale: factor on every spread.
        travel_scale: measured over true travel.

    Returns:
        [t 3] forward_m, left_m, turn_rad since the previous row, zeros in the first.
    """
    noise = noise or OdometryNoise()
    motion = np.zeros_like(poses)
    motion[1:] = between(poses[:-1], poses[1:])
    travel, turn = np.hypot(motion[:, 0], motion[:, 1]), np.abs(motion[:, 2])
    travel_sd = np.hypot(noise.travel_from_travel * travel, noise.travel_from_turn * turn)
    turn_sd = np.hypot(noise.turn_from_turn * turn, noise.turn_from_travel * travel)
    spread = noise_scale * np.stack([travel_sd, travel_sd, turn_sd], axis=1)
    measured = motion * [travel_scale, travel_scale, 1.0] + spread * rng.standard_normal(poses.shape)
    measured[:, 2] = wrap(measured[:, 2])
    return measured

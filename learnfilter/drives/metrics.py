"""How well a filter did on one drive: located or not, nats at the truth, metres until lock.

Everything here is per drive; `ablation/statistics.py` turns many drives into evidence.  Where the
reference pose is unknown (NaN) nothing is judged and the value is NaN, never False.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.lock import Lock
from learnfilter.core.poses import wrap

# Located: good enough for a planner to take over from here (design.md, section 2).
WITHIN_M = 0.5
WITHIN_RAD = np.radians(15.0)

Floats = NDArray[np.floating]


def pose_errors(estimate: ArrayLike, reference: ArrayLike) -> tuple[Floats, Floats]:
    """Distance and angle between poses.

    Args:
        estimate: [... 3] x_m, y_m, heading_rad.
        reference: [... 3] likewise, broadcast against the estimate.

    Returns:
        [...] metres, and [...] radians in [0, pi].
    """
    gap = np.asarray(estimate, dtype=float) - np.asarray(reference, dtype=float)
    return np.hypot(gap[..., 0], gap[..., 1]), np.abs(wrap(gap[..., 2]))


def located(
    estimate: ArrayLike, reference: ArrayLike, within_m: float = WITHIN_M, within_rad: float = WITHIN_RAD
) -> Floats:
    """[...] 1 where an estimate is near the reference ([... 3] both), 0 where not, NaN where unknown."""
    metres, radians = pose_errors(estimate, reference)
    near = (metres <= within_m) & (radians <= within_rad)
    return np.where(np.isnan(metres + radians), np.nan, near)


def first_lock(mass_near_mode: ArrayLike) -> int | None:
    """Index of the weighed strip at which the lock is first held, or None.

    Args:
        mass_near_mode: [t] see `Lock.after`, one a weighed strip.
    """
    lock = Lock()
    for index, mass in enumerate(np.asarray(mass_near_mode, dtype=float)):
        lock = lock.after(mass)
        if lock.held:
            return index
    return None


def travelled(odometry: ArrayLike) -> Floats:
    """[t] metres driven since the first row, from odometry [t 3]."""
    steps = np.asarray(odometry, dtype=float)
    return np.cumsum(np.hypot(steps[:, 0], steps[:, 1]))

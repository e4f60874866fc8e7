"""Planar poses and motions.

Frames as ISO 8855: x forward, y left, angles counter-clockwise.  A pose is [x_m, y_m, heading_rad]
in the site frame (x right, y up); a motion is [forward_m, left_m, turn_rad] in the frame of the
pose before it.  Both are rows of the last axis, so one function composes either.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


def wrap(angle: ArrayLike) -> Floats:
    """Wrap radians to [-pi, pi)."""
    return (np.asarray(angle, dtype=float) + np.pi) % (2 * np.pi) - np.pi


def compose(pose: ArrayLike, motion: ArrayLike) -> Floats:
    """Carry a pose through a motion: shift under the old heading, then turn.

    Args:
        pose: [... 3] x_m, y_m, heading_rad.
        motion: [... 3] forward_m, left_m, turn_rad, in the pose's own frame.

    Returns:
        [... 3], heading wrapped to [-pi, pi).
    """
    pose, motion = np.asarray(pose, dtype=float), np.asarray(motion, dtype=float)
    cos, sin = np.cos(pose[..., 2]), np.sin(pose[..., 2])
    return np.stack(
        [
            pose[..., 0] + cos * motion[..., 0] - sin * motion[..., 1],
            pose[..., 1] + sin * motion[..., 0] + cos * motion[..., 1],
            wrap(pose[..., 2] + motion[..., 2]),
        ],
        axis=-1,
    )


def inverse(motion: ArrayLike) -> Floats:
    """The motion that undoes `motion` ([... 3]): compose(compose(p, m), inverse(m)) is p."""
    motion = np.asarray(motion, dtype=float)
    cos, sin = np.cos(motion[..., 2]), np.sin(motion[..., 2])
    return np.stack(
        [
            -cos * motion[..., 0] - sin * motion[..., 1],
            sin * motion[..., 0] - cos * motion[..., 1],
            wrap(-motion[..., 2]),
        ],
        axis=-1,
    )


def between(start: ArrayLike, end: ArrayLike) -> Floats:
    """The motion, in the frame of `start`, that leads from pose `start` to pose `end` ([... 3])."""
    return compose(inverse(start), end)


def through_mount(motion: ArrayLike, mount: ArrayLike) -> Floats:
    """The sensor's motion when its carrier makes `motion`.

    Args:
        motion: [... 3] motion of the carrier.
        mount: [3] pose of the sensor in the carrier's frame (forward_m, left_m, turn_rad).

    Returns:
        [... 3] inverse(mount), then motion, then mount.
    """
    return compose(compose(inverse(mount), motion), mount)

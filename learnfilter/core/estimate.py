"""What a belief says: its modes, their means, how much mass lies near them.

NumPy only; the laptop's evaluation and the robot's runtime read beliefs with the same code.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.grid import PoseGrid
from learnfilter.core.poses import wrap

NEAR_M = 0.5
NEAR_RAD = np.radians(15.0)
NEGLIGIBLE = 1e-3


class Mode(NamedTuple):
    """One mode of a belief.

    Attributes:
        pose: [3] x_m, y_m, heading_rad: mean of the mass near it.
        mass: probability within NEAR_M and NEAR_RAD of the mean.
        covariance: [3 3] of that mass about the mean, same units.
    """

    pose: NDArray[np.float64]
    mass: float
    covariance: NDArray[np.float64]


def near(belief: NDArray, grid: PoseGrid, pose: NDArray) -> tuple[NDArray, NDArray, NDArray, NDArray]:
    """Mass and offsets of the poses within NEAR_M and NEAR_RAD of a pose.

    Returns:
        mass [k], dx [k], dy [k] metres and dh [k] radians from `pose`.
    """
    row, column = grid.cell_of(pose[0], pose[1])
    reach = int(np.ceil(NEAR_M / grid.cell_m)) + 1
    r = np.arange(max(int(row) - reach, 0), min(int(row) + reach + 1, grid.rows))
    c = np.arange(max(int(column) - reach, 0), min(int(column) + reach + 1, grid.columns))
    dh = wrap(grid.heading_centres() - pose[2])
    h = np.flatnonzero(np.abs(dh) <= NEAR_RAD + 1e-9)
    dx, dy = grid.x_centres()[c] - pose[0], grid.y_centres()[r] - pose[1]
    inside = dx[None, :] ** 2 + dy[:, None] ** 2 <= NEAR_M**2
    mass = belief[np.ix_(h, r, c)] * inside
    keep = mass > 0
    full = np.broadcast_arrays(dx[None, None, :], dy[None, :, None], dh[h][:, None, None])
    shape = mass.shape
    return mass[keep].astype(float), *(np.broadcast_to(a, shape)[keep] for a in full)


def mass_near(belief: NDArray, grid: PoseGrid, pose: NDArray) -> float:
    """Probability within NEAR_M and NEAR_RAD of a pose [3]."""
    return float(near(belief, grid, pose)[0].sum())


def mode_at(belief: NDArray, grid: PoseGrid, pose: NDArray, rounds: int = 3) -> Mode:
    """The mode that a starting pose [3] climbs to: the mean of the mass near it, a few times over."""
    pose = np.asarray(pose, dtype=float)
    for _ in range(rounds):
        mass, dx, dy, dh = near(belief, grid, pose)
        total = mass.sum()
        if total <= 0:
            return Mode(pose, 0.0, np.zeros((3, 3)))
        offset = np.array([mass @ dx, mass @ dy, mass @ dh]) / total
        pose = pose + offset
        pose[2] = wrap(pose[2])
    mass, dx, dy, dh = near(belief, grid, pose)
    total = mass.sum()
    offsets = np.stack([dx, dy, dh])
    offsets = offsets - (offsets @ mass / max(total, 1e-300))[:, None]
    return Mode(pose, float(total), offsets * mass @ offsets.T / max(total, 1e-300))


def modes(belief: NDArray, grid: PoseGrid, count: int = 4) -> tuple[Mode, ...]:
    """Separate modes, heaviest first: the highest pose, its surroundings taken out, again.

    No further mode is looked for once less than `NEGLIGIBLE` of the belief is left.

    Args:
        belief: [h r c] probabilities.
        grid: the lattice.
        count: at most this many.
    """
    left = np.array(belief, dtype=np.float32)
    found: list[Mode] = []
    for _ in range(count):
        h, r, c = np.unravel_index(int(np.argmax(left)), left.shape)
        if left[h, r, c] <= 0:
            break
        peak = np.array([grid.x_centres()[c], grid.y_centres()[r], grid.heading_centres()[h]])
        mode = mode_at(belief, grid, peak)
        if not any(_beside(mode, other) for other in found):  # a flank can climb to a mode that was found
            found.append(mode)
        _take_out(left, grid, peak)
        if left.sum() < NEGLIGIBLE:
            break
    return tuple(sorted(found, key=lambda mode: -mode.mass))


def _beside(mode: Mode, other: Mode) -> bool:
    """Whether two means are within the reach of a mode."""
    gap = mode.pose - other.pose
    return bool(np.hypot(gap[0], gap[1]) <= NEAR_M and abs(wrap(gap[2])) <= NEAR_RAD)


def _take_out(belief: NDArray, grid: PoseGrid, pose: NDArray) -> None:
    """Zero, in place, twice the reach of a mode around a pose, so that its flank is no mode."""
    reach = int(np.ceil(2 * NEAR_M / grid.cell_m))
    row, column = grid.cell_of(pose[0], pose[1])
    h = np.flatnonzero(np.abs(wrap(grid.heading_centres() - pose[2])) <= 2 * NEAR_RAD + 1e-9)
    r0, c0 = max(int(row) - reach, 0), max(int(column) - reach, 0)
    belief[
        h[:, None, None],
        np.arange(r0, min(int(row) + reach + 1, grid.rows))[None, :, None],
        np.arange(c0, min(int(column) + reach + 1, grid.columns))[None, None, :],
    ] = 0.0


def entropy(belief: NDArray) -> float:
    """Entropy of a belief in nats."""
    mass = belief[belief > 0]
    return float(-(mass * np.log(mass)).sum())


def credible_rank(belief: ArrayLike, truth: tuple[int, ...], rng: np.random.Generator) -> float:
    """Mass of the smallest highest-density set that reaches the true pose.

    Uniform on [0, 1] over many drives if the belief is calibrated; ties (and the true pose's own
    mass) are split at random so that this holds for a discrete belief too.

    Args:
        belief: any shape, probabilities that sum to one.
        truth: index of the true pose in it.
        rng: source of the split.

    Source: Hyndman 1996 (highest-density sets); Czado, Gneiting and Held 2009 (the randomised rank).
    """
    belief = np.asarray(belief)
    above = belief[belief > belief[truth]].sum()
    return float(above + rng.random() * belief[belief == belief[truth]].sum())

"""How well a filter did on one drive: located or not, nats at the truth, metres until lock.

Everything here is per drive; `ablation/statistics.py` turns many drives into evidence.  Where the
reference pose is unknown (NaN) nothing is judged and the value is NaN, never False.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.lock import Lock
from learnfilter.core.poses import wrap
from learnfilter.core.shapes import check

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


def circular_mean(angles: ArrayLike, weights: ArrayLike | None = None, axis: int = -1) -> Floats:
    """Direction of the (weighted) mean unit vector along `axis`, radians in [-pi, pi).

    Source: Mardia and Jupp, Directional Statistics (2000), ch. 2.
    """
    turns = np.exp(1j * np.asarray(angles, dtype=float))
    return wrap(np.angle(np.sum(turns if weights is None else weights * turns, axis=axis)))


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


@dataclass(frozen=True, eq=False)
class Outcome:
    """One drive through one filter.

    Attributes:
        located: [t] 1, 0 or NaN after each weighed strip.
        nll: [t] nats, minus the log-probability of the true pose after each weighed strip.
        locked: whether the lock was held before the cap.
        metres_until_lock: metres driven by then; the cap where never (censored).
        false_lock: 1 if it locked at a wrong pose, 0 if at the right one or never, NaN if unknown.
    """

    located: Floats
    nll: Floats
    locked: bool
    metres_until_lock: float
    false_lock: float


def judge(
    estimate: ArrayLike,
    reference: ArrayLike,
    log_mass_at_truth: ArrayLike,
    mass_near_mode: ArrayLike,
    metres: ArrayLike,
    cap_m: float,
) -> Outcome:
    """Judge one drive after every weighed strip.

    Args:
        estimate: [t 3] best mode's mean: x_m, y_m, heading_rad.
        reference: [t 3] true pose, NaN where unknown.
        log_mass_at_truth: [t] nats, log-probability of the true pose's cell, NaN where unknown.
        mass_near_mode: [t] see `Lock.after`.
        metres: [t] metres driven until each weighed strip.
        cap_m: metres after which a search counts as failed.

    Raises:
        ShapeError: the lengths differ.
    """
    estimate, reference = np.asarray(estimate, dtype=float), np.asarray(reference, dtype=float)
    metres = np.asarray(metres, dtype=float)
    sizes = check("estimate", estimate, "t c", c=3)
    check("reference", reference, "t c", **sizes)
    series = {"log_mass_at_truth": log_mass_at_truth, "mass_near_mode": mass_near_mode, "metres": metres}
    for name, values in series.items():
        check(name, np.asarray(values), "t", **sizes)
    right = located(estimate, reference)
    at = first_lock(mass_near_mode)
    locked = at is not None and bool(metres[at] <= cap_m)
    return Outcome(
        located=right,
        nll=-np.asarray(log_mass_at_truth, dtype=float),
        locked=locked,
        metres_until_lock=float(metres[at]) if locked else float(cap_m),
        false_lock=float(1 - right[at]) if locked else 0.0,
    )


def summarise(outcomes: Sequence[Outcome], after: Sequence[int] = (1, 3, 10)) -> dict[str, Floats]:
    """One number a drive for every question an ablation asks.

    Args:
        outcomes: [drives].
        after: numbers of weighed strips to look at.

    Returns:
        [drives] arrays: `located_after_N` and `nll_after_N` for each N (NaN where the drive is
        shorter or the truth unknown), `locked`, `metres_until_lock`, `false_lock`.  The mean of
        metres until lock, censored at one cap for all, is the restricted mean (Royston and Parmar 2013).
    """

    def at(values: Floats, strips: int) -> float:
        return float(values[strips - 1]) if strips <= len(values) else np.nan

    table: dict[str, list[float]] = {}
    for n in after:
        table[f"located_after_{n}"] = [at(outcome.located, n) for outcome in outcomes]
        table[f"nll_after_{n}"] = [at(outcome.nll, n) for outcome in outcomes]
    for name in ("locked", "metres_until_lock", "false_lock"):
        table[name] = [getattr(outcome, name) for outcome in outcomes]
    return {name: np.array(values, dtype=float) for name, values in table.items()}

"""Whether a filter's own confidence can be believed: calibration, coverage, locks."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np

from learnfilter.ablation.statistics import Interval, bootstrap, coverage, debiased_calibration_error, wilson
from learnfilter.ablation.study import Row
from learnfilter.ablation.verdict import drives_of

LEVELS = (0.5, 0.9, 0.95)  # masses of the credible sets that are checked
RESAMPLES = 200
BINS = 10


class Trust(NamedTuple):
    """How far one contender's confidence can be believed.

    Attributes:
        contender: its name.
        calibration: debiased error of 'the pose is within 0.5 m and 15 degrees of the estimate', every
            strip of every drive.
        coverage: worst gap between a credible set's mass and the share of true poses in it.
        lock_metres: metres until lock, mean, censored at the cap (restricted mean).
        locked, false_locks: shares of drives that locked before the cap, and at a wrong pose.
        strips: number of strips judged.
    """

    contender: str
    calibration: Interval
    coverage: Interval
    lock_metres: Interval
    locked: Interval
    false_locks: Interval
    strips: int


def trust(rows: Sequence[Row], contender: str, rng: np.random.Generator) -> Trust:
    """Judge the confidence of one contender on all rows given."""
    own = [row for row in rows if row["contender"] == contender]
    order, units = drives_of(own)
    by_drive = {(row["condition"], row["drive"]): row for row in own}
    own = [by_drive[drive] for drive in order]
    metres = [row["cap_metres"] if row["lock_metres"] is None else row["lock_metres"] for row in own]
    return Trust(
        contender,
        _over_sites(own, units, _calibration, rng),
        _over_sites(own, units, _coverage, rng),
        bootstrap(metres, units, rng=rng),
        wilson(sum(row["lock_metres"] is not None for row in own), len(own)),
        wilson(sum(row["false_lock"] for row in own), len(own)),
        sum(len(row["mass"]) for row in own),
    )


def _calibration(rows: Sequence[Row]) -> float:
    mass, right = (np.concatenate([row[key] for row in rows]) for key in ("mass", "right"))
    known = np.isfinite(right)
    if known.sum() < 2 * BINS:
        return float("nan")
    return debiased_calibration_error(mass[known].clip(0, 1), right[known], BINS)


def _coverage(rows: Sequence[Row]) -> float:
    ranks = np.concatenate([row["rank"] for row in rows])
    return max(abs(coverage(ranks, level).value - level) for level in LEVELS)


def _over_sites(
    rows: Sequence[Row], units: np.ndarray, statistic: Callable[[Sequence[Row]], float], rng
) -> Interval:
    """A statistic of all strips, with its percentile interval: sites drawn with replacement."""
    groups = [
        [row for row, unit in zip(rows, units, strict=True) if unit == name] for name in np.unique(units)
    ]
    drawn = [
        statistic([row for k in rng.integers(len(groups), size=len(groups)) for row in groups[int(k)]])
        for _ in range(RESAMPLES if len(groups) > 1 else 0)
    ]
    value, known = statistic(rows), np.array(drawn)[np.isfinite(drawn)]
    if np.isnan(value) or not len(known):
        return Interval(value, float("nan"), float("nan"), len(groups))
    low, high = np.percentile(known, (2.5, 97.5))
    return Interval(value, float(low), float(high), len(groups))

"""What a table of results allows to be said: intervals, paired tests, calibration, sample size.

The unit of evidence is the site: poses of one drive, and drives of one site, resemble each other,
so intervals resample sites first and drives within them (hierarchical bootstrap), never strips.

Sources: Wilson 1927 (interval of a share; Newcombe 1998 for its behaviour); McNemar 1947, exact
binomial form; Holm 1979 (several comparisons); Efron and Tibshirani 1993
(percentile bootstrap); Davison and Hinkley 1997, ch. 3 (resampling grouped data); Guo et al. 2017
(binned calibration error); Kumar, Liang and Ma 2019 (its debiased form).
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

from learnfilter.core.shapes import check

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Interval:
    """A value with its confidence interval.

    Attributes:
        value, low, high: NaN where there is no number (no data; bounds also with a single site).
        n: independent units it rests on: trials of a share, sites of a bootstrap.
    """

    value: float
    low: float
    high: float
    n: int

    def as_dict(self) -> dict[str, float | int | None]:
        """Plain values for JSON; what is no number becomes None."""
        return {key: None if math.isnan(value) else value for key, value in asdict(self).items()}


def wilson(k: int, n: int, level: float = 0.95) -> Interval:
    """Interval of the share k of n independent trials."""
    if n == 0:
        return Interval(math.nan, math.nan, math.nan, 0)
    z = float(stats.norm.ppf((1 + level) / 2))
    share, scale = k / n, 1 + z**2 / n
    centre = (share + z**2 / (2 * n)) / scale
    half = z / scale * math.sqrt(share * (1 - share) / n + z**2 / (4 * n**2))
    low = 0.0 if k == 0 else centre - half
    high = 1.0 if k == n else centre + half
    return Interval(share, low, high, n)


def mcnemar_exact(b: int, c: int) -> float:
    """Two-sided p-value that two methods are right equally often.

    Args:
        b: pairs where only the first is right.
        c: pairs where only the second is right.
    """
    return float(stats.binomtest(b, b + c).pvalue) if b + c else 1.0


def holm(p_values: ArrayLike) -> Floats:
    """[m] p-values adjusted so that all m may be read together (family-wise error)."""
    p = np.asarray(p_values, dtype=float)
    order = np.argsort(p)
    stepped = np.maximum.accumulate(p[order] * np.arange(len(p), 0, -1))
    adjusted = np.empty_like(p)
    adjusted[order] = np.minimum(stepped, 1.0)
    return adjusted


def bootstrap(
    values: ArrayLike,
    site: ArrayLike,
    drive: ArrayLike | None = None,
    *,
    rng: np.random.Generator,
    n: int = 2000,
    level: float = 0.95,
) -> Interval:
    """Mean over sites, of means over drives, of means over values, with its percentile interval.

    Args:
        values: [m] one result a row; NaN rows are left out.
        site: [m] label of the site.
        drive: [m] label of the drive within its site; None: every row is a drive.
        rng: source of the resampling.
        n: resamples.
        level: confidence.

    Raises:
        ShapeError: lengths differ.
    """
    drives = _drive_means(values, site, drive)
    if not drives:
        return Interval(math.nan, math.nan, math.nan, 0)
    value = float(np.mean([means.mean() for means in drives]))
    if len(drives) == 1:
        return Interval(value, math.nan, math.nan, 1)
    resampled = _resampled_means(drives, rng, n)
    low, high = np.quantile(resampled, [(1 - level) / 2, (1 + level) / 2])
    return Interval(value, float(low), float(high), len(drives))


def paired_bootstrap(
    values_a: ArrayLike,
    values_b: ArrayLike,
    site: ArrayLike,
    drive: ArrayLike | None = None,
    *,
    rng: np.random.Generator,
    n: int = 2000,
    level: float = 0.95,
) -> Interval:
    """`bootstrap` of a - b, row by row: both methods saw the same drives."""
    differences = np.asarray(values_a, dtype=float) - np.asarray(values_b, dtype=float)
    return bootstrap(differences, site, drive, rng=rng, n=n, level=level)


def site_means(values: ArrayLike, site: ArrayLike, drive: ArrayLike | None = None) -> Floats:
    """[sites] means over drives of means over values, sites in sorted order, empty ones left out."""
    return np.array([means.mean() for means in _drive_means(values, site, drive)])


def _drive_means(values: ArrayLike, site: ArrayLike, drive: ArrayLike | None) -> list[Floats]:
    """For each site, the mean of each of its drives."""
    results, sites = np.asarray(values, dtype=float), np.asarray(site)
    drives = np.arange(len(results)) if drive is None else np.asarray(drive)
    sizes = check("values", results, "m")
    check("site", sites, "m", **sizes)
    check("drive", drives, "m", **sizes)
    known = ~np.isnan(results)

    def means(rows: NDArray[np.bool_]) -> Floats:
        _, index = np.unique(drives[rows], return_inverse=True)
        return np.bincount(index, weights=results[rows]) / np.bincount(index)

    return [means(known & (sites == name)) for name in np.unique(sites[known])]


def _resampled_means(drives: list[Floats], rng: np.random.Generator, n: int) -> Floats:
    """[n] mean of site means, sites drawn with replacement and drives within each likewise."""
    counts = np.array([len(means) for means in drives])
    padded = np.zeros((len(drives), counts.max()))
    for row, means in zip(padded, drives, strict=True):
        row[: len(means)] = means
    total = np.zeros(n)
    for _ in drives:  # one draw of a site, for all resamples at once
        chosen = rng.integers(len(drives), size=n)
        picks = (rng.random((n, counts.max())) * counts[chosen, None]).astype(int)
        drawn = np.arange(counts.max()) < counts[chosen, None]
        total += np.sum(padded[chosen[:, None], picks], axis=1, where=drawn) / counts[chosen]
    return total / len(drives)


def sites_needed(differences: ArrayLike, margin: float = 0.0, level: float = 0.95) -> int | None:
    """How many more sites would make the interval of the mean difference clear the margin.

    Assumes that further sites have the mean and spread of those seen (Student's interval), so it is
    advice on the order of the effort, not a promise.

    Args:
        differences: [sites] one paired difference a site; see `site_means`.
        margin: size the difference must be shown to exceed.
        level: confidence.

    Returns:
        0 if it is clear already; None if no number would do, or fewer than two sites were seen.
    """
    d = np.asarray(differences, dtype=float)
    if len(d) < 2 or abs(d.mean()) <= margin:
        return None
    effect = (abs(d.mean()) - margin) / max(d.std(ddof=1), np.finfo(float).tiny)
    p = (1 + level) / 2
    total = max(len(d), math.ceil((stats.norm.ppf(p) / effect) ** 2))
    while stats.t.ppf(p, total - 1) > effect * math.sqrt(total):
        total += 1
    return total - len(d)


@dataclass(frozen=True)
class CalibrationError:
    """Gaps between confidence and share right, over bins: weighted mean, root mean square, worst."""

    mean: float
    rms: float
    worst: float


def calibration_error(confidence: ArrayLike, correct: ArrayLike, n_bins: int = 10) -> CalibrationError:
    """Binned calibration error over bins of equal width.

    It is biased upward: a calibrated model shows more than zero on a finite sample.  To compare
    models use `debiased_calibration_error`.

    Args:
        confidence: [n] stated probability, in [0, 1].
        correct: [n] whether it came true, 0 or 1.
        n_bins: number of bins.
    """
    confidence, correct = np.asarray(confidence, dtype=float), np.asarray(correct, dtype=float)
    index = np.clip(np.ceil(confidence * n_bins).astype(int) - 1, 0, n_bins - 1)
    counts = np.bincount(index, minlength=n_bins)
    sums = np.bincount(index, weights=correct - confidence, minlength=n_bins)
    filled = counts > 0
    share, gap = counts[filled] / len(confidence), np.abs(sums[filled] / counts[filled])
    return CalibrationError(
        float(share @ gap), float(np.sqrt(share @ gap**2)), float(np.max(gap, initial=0.0))
    )


def debiased_calibration_error(confidence: ArrayLike, correct: ArrayLike, n_bins: int = 10) -> float:
    """Root mean square calibration error over bins of equal count, less what chance alone would show.

    Args:
        confidence: [n] stated probability.
        correct: [n] whether it came true, 0 or 1.
        n_bins: number of bins, each with at least two of the n.

    Returns:
        0 where the gaps are no larger than chance makes them.

    Raises:
        ValueError: fewer than two samples a bin.
    """
    confidence, correct = np.asarray(confidence, dtype=float), np.asarray(correct, dtype=float)
    if len(confidence) < 2 * n_bins:
        raise ValueError(f"{n_bins} bins need at least {2 * n_bins} samples, got {len(confidence)}")
    squares = 0.0
    for bin_ in np.array_split(np.argsort(confidence, kind="stable"), n_bins):
        share_right = correct[bin_].mean()
        chance = share_right * (1 - share_right) / (len(bin_) - 1)
        squares += len(bin_) * ((confidence[bin_].mean() - share_right) ** 2 - chance)
    return math.sqrt(max(0.0, squares / len(confidence)))


def coverage(ranks: ArrayLike, level: float = 0.9) -> Interval:
    """Share of credible sets of mass `level` that hold the truth; near `level` if calibrated.

    Args:
        ranks: [n] from `core.estimate.credible_rank`, one a drive: ranks of one drive are not independent.
        level: mass of the sets.
    """
    ranks = np.asarray(ranks, dtype=float)
    return wilson(int(np.sum(ranks <= level)), len(ranks))

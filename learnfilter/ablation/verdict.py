"""From rows to tables, paired differences and one sentence."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.ablation.statistics import Interval, bootstrap, paired_bootstrap, site_means, sites_needed
from learnfilter.ablation.study import MARKS, Row
from learnfilter.core.errors import ConfigError

# More sites than this are no advice but a way of saying that there is no difference.
MOST_SITES = 500


class Score(NamedTuple):
    """One contender after one number of strips: located share and nats at the true pose."""

    contender: str
    mark: int
    located: Interval
    nll: Interval


class Difference(NamedTuple):
    """Learned minus analytic after one number of strips, paired by drive.

    Attributes:
        located: share gained; above zero favours the learned model.
        nll: nats saved; above zero favours the learned model.
    """

    mark: int
    located: Interval
    nll: Interval


def column(rows: Sequence[Row], contender: str, key: str, order: Sequence[str]) -> NDArray[np.float64]:
    """Values of one contender in the order of drives; NaN where a drive was too short."""
    by_drive = {row["drive"]: row.get(key) for row in rows if row["contender"] == contender}
    values = [by_drive.get(drive) for drive in order]
    return np.array([np.nan if v is None else float(v) for v in values])


def drives_of(rows: Sequence[Row]) -> tuple[list[str], NDArray]:
    """All drives in a fixed order, and the site of each."""
    site_of = {row["drive"]: row["site"] for row in rows}
    order = sorted(site_of)
    sites = np.array([site_of[drive] for drive in order])
    # on a single site the drives are what is independent
    return order, np.array(order) if len(set(sites)) == 1 else sites


def marks_of(rows: Sequence[Row]) -> list[int]:
    """Numbers of strips that at least one drive reached."""
    return [mark for mark in MARKS if any(f"nll_{mark}" in row for row in rows)]


def scores(rows: Sequence[Row], contenders: Sequence[str], rng: np.random.Generator) -> list[Score]:
    """Located share and nats of each contender after each number of strips, with intervals over sites."""
    order, sites = drives_of(rows)
    return [
        Score(
            name,
            mark,
            bootstrap(column(rows, name, f"located_{mark}", order), sites, rng=rng),
            bootstrap(column(rows, name, f"nll_{mark}", order), sites, rng=rng),
        )
        for name in contenders
        for mark in marks_of(rows)
    ]


def differences(
    rows: Sequence[Row], learned: str, analytic: str, rng: np.random.Generator
) -> list[Difference]:
    """Paired differences after each number of strips."""
    order, sites = drives_of(rows)

    def compare(first: str, second: str, key: str) -> Interval:
        return paired_bootstrap(
            column(rows, first, key, order), column(rows, second, key, order), sites, rng=rng
        )

    return [
        Difference(
            mark, compare(learned, analytic, f"located_{mark}"), compare(analytic, learned, f"nll_{mark}")
        )
        for mark in marks_of(rows)
    ]


class Verdict(NamedTuple):
    """What to ship: 'learned', 'analytic' or 'cannot tell', in one sentence and how sure."""

    ship: str
    sentence: str
    confidence: str


def decide(
    rows: Sequence[Row], learned: str, analytic: str, found: Sequence[Difference], mark: int
) -> Verdict:
    """Decide by the located share after `mark` strips; nats speak where shares are level.

    The learned model is shipped if it locates more and saves nats, both beyond doubt (95 %
    intervals above zero), and is not clearly worse at any other number of strips.

    Raises:
        ConfigError: no drive has `mark` weighed strips.
    """
    by_mark = {difference.mark: difference for difference in found}
    if mark not in by_mark:
        expected = f"at most {max(by_mark)}, or longer drives"
        raise ConfigError("no drive is so long", place="study.mark", expected=expected, got=mark)
    at = by_mark[mark]
    worse = [d.mark for d in found if d.located.high < 0]
    confidence = _confidence(at)
    if at.located.low > 0 and at.nll.low > 0 and not worse:
        return Verdict("learned", f"Ship the learned model: {learned} beats {analytic}.", confidence)
    if at.located.high < 0 or (at.nll.high < 0 and at.located.value <= 0):
        return Verdict(
            "analytic", f"Ship the analytic model: {learned} does not beat {analytic}.", confidence
        )
    return Verdict(
        "cannot tell",
        f"Cannot tell {learned} from {analytic}: {_more(rows, learned, analytic, mark)}",
        confidence,
    )


def _confidence(at: Difference) -> str:
    points, nats = 100 * at.located.value, at.nll.value
    if at.located.n < 2:
        return f"{points:+.1f} points located after {at.mark} strips, {nats:+.2f} nats saved, on one drive."
    return (
        f"{points:+.1f} points located after {at.mark} strips "
        f"({100 * at.located.low:+.1f} to {100 * at.located.high:+.1f}), "
        f"{nats:+.2f} nats saved ({at.nll.low:+.2f} to {at.nll.high:+.2f}); "
        f"95 % intervals, paired by drive, bootstrap over {at.located.n} units."
    )


def _more(rows: Sequence[Row], learned: str, analytic: str, mark: int) -> str:
    order, sites = drives_of(rows)
    key = f"located_{mark}"
    gaps = site_means(column(rows, learned, key, order) - column(rows, analytic, key, order), sites)
    if len(gaps) < 2:
        return "one drive decides nothing."
    needed = sites_needed(gaps)
    if needed is None or needed > MOST_SITES:
        return "the difference is too small to be worth more drives; ship the analytic one."
    unit = "drives" if len({row["site"] for row in rows}) == 1 else "sites"
    return f"about {needed} more {unit} would."


def choose_analytic(validation: dict[str, float]) -> str:
    """The analytic contender with the lowest nats on validation drives: chosen before the test."""
    return min(validation, key=lambda name: validation[name])

"""From rows to tables, paired differences and one sentence."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.ablation.statistics import (
    Interval,
    bootstrap,
    holm,
    mcnemar_exact,
    paired_bootstrap,
    site_means,
    sites_needed,
)
from learnfilter.ablation.study import Row
from learnfilter.core.errors import ConfigError

# More sites than this are no advice but a way of saying that there is no difference.
MOST_SITES = 500
ALL = "all conditions"


class Score(NamedTuple):
    """One contender after one number of strips: located share and nats at the true pose."""

    contender: str
    mark: int
    located: Interval
    nll: Interval


class Difference(NamedTuple):
    """Learned minus analytic under one condition after one number of strips, paired by drive.

    Attributes:
        condition: its name, or ALL for the mean over all of them.
        located: share gained; above zero favours the learned model.
        nll: nats saved; above zero favours the learned model.
        p: exact McNemar test of the located shares, adjusted (Holm) for all conditions at this mark.
    """

    condition: str
    mark: int
    located: Interval
    nll: Interval
    p: float


Drive = tuple[str, str]  # condition, drive


def column(rows: Sequence[Row], contender: str, key: str, order: Sequence[Drive]) -> NDArray[np.float64]:
    """Values of one contender in the order of drives; NaN where a drive was too short."""
    by_drive = {
        (row["condition"], row["drive"]): row.get(key) for row in rows if row["contender"] == contender
    }
    values = [by_drive.get(drive) for drive in order]
    return np.array([np.nan if v is None else float(v) for v in values])


def drives_of(rows: Sequence[Row]) -> tuple[list[Drive], NDArray]:
    """All drives in a fixed order, and the unit of evidence of each, whatever the condition."""
    unit_of = {(row["condition"], row["drive"]): row["unit"] for row in rows}
    order = sorted(unit_of)
    return order, np.array([unit_of[drive] for drive in order])


def conditions_of(rows: Sequence[Row]) -> list[str]:
    """Conditions in the order they were studied."""
    return list(dict.fromkeys(row["condition"] for row in rows))


def under(rows: Sequence[Row], condition: str) -> list[Row]:
    """Rows of one condition, or of all."""
    return [row for row in rows if condition in (ALL, row["condition"])]


def marks_of(rows: Sequence[Row]) -> list[int]:
    """Numbers of strips that at least one drive reached."""
    reached = {int(key.removeprefix("nll_")) for row in rows for key in row if key.startswith("nll_")}
    return sorted(reached)


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
    """Paired differences under every condition after every number of strips, and over all of them."""
    conditions, found = conditions_of(rows), []
    named = conditions if len(conditions) == 1 else [ALL, *conditions]
    for mark in marks_of(rows):
        tests = holm([_mcnemar(under(rows, name), learned, analytic, mark) for name in conditions])
        p_of = dict(zip(conditions, tests, strict=True))
        for name in named:
            own = under(rows, name)
            order, sites = drives_of(own)

            def compare(first: str, second: str, key: str, own=own, order=order, sites=sites) -> Interval:
                return paired_bootstrap(
                    column(own, first, key, order), column(own, second, key, order), sites, rng=rng
                )

            found.append(
                Difference(
                    name,
                    mark,
                    compare(learned, analytic, f"located_{mark}"),
                    compare(analytic, learned, f"nll_{mark}"),
                    float(p_of.get(name, _mcnemar(own, learned, analytic, mark))),
                )
            )
    return found


def _mcnemar(rows: Sequence[Row], learned: str, analytic: str, mark: int) -> float:
    order, _ = drives_of(rows)
    ours, theirs = (column(rows, name, f"located_{mark}", order) for name in (learned, analytic))
    return mcnemar_exact(int(np.sum(ours > theirs)), int(np.sum(ours < theirs)))


class Verdict(NamedTuple):
    """What to ship: 'learned', 'analytic' or 'cannot tell', in one sentence and how sure."""

    ship: str
    sentence: str
    confidence: str


def decide(
    rows: Sequence[Row], learned: str, analytic: str, found: Sequence[Difference], mark: int
) -> Verdict:
    """Decide by the located share after `mark` strips; nats speak where shares are level.

    The learned model is shipped if over all conditions it locates more and saves nats, both beyond doubt
    (95 % intervals above zero), and is beyond doubt worse under no condition (Holm over conditions).

    Raises:
        ConfigError: no drive has `mark` weighed strips.
    """
    if mark not in {d.mark for d in found}:
        expected = f"at most {max(d.mark for d in found)}, or longer drives"
        raise ConfigError("no drive is so long", place="study.mark", expected=expected, got=mark)
    at = next(d for d in found if d.mark == mark)  # the first is over all conditions
    worse = sorted({d.condition for d in found if d.located.high < 0 and d.p < 0.05})
    confidence = _confidence(at, len(conditions_of(rows)))
    if at.located.low > 0 and at.nll.low > 0 and not worse:
        return Verdict("learned", f"Ship the learned model: {learned} beats {analytic}.", confidence)
    if at.located.high < 0 or (at.nll.high < 0 and at.located.value <= 0):
        return Verdict(
            "analytic", f"Ship the analytic model: {learned} does not beat {analytic}.", confidence
        )
    if at.located.low > 0 and at.nll.low > 0:
        return Verdict(
            "cannot tell",
            f"Cannot tell {learned} from {analytic}: it gains on the whole but loses under "
            f"{', '.join(worse)}. Ship the analytic one where that can happen.",
            confidence,
        )
    return Verdict(
        "cannot tell",
        f"Cannot tell {learned} from {analytic}: {_more(rows, learned, analytic, mark)}",
        confidence,
    )


def _confidence(at: Difference, conditions: int) -> str:
    points, nats = 100 * at.located.value, at.nll.value
    if at.located.n < 2:
        return f"{points:+.1f} points located after {at.mark} strips, {nats:+.2f} nats saved, on one drive."
    over = f"mean over {conditions} conditions, " if conditions > 1 else ""
    return (
        f"{points:+.1f} points located after {at.mark} strips "
        f"({100 * at.located.low:+.1f} to {100 * at.located.high:+.1f}), "
        f"{nats:+.2f} nats saved ({at.nll.low:+.2f} to {at.nll.high:+.2f}); "
        f"95 % intervals, {over}paired by drive, bootstrap over {at.located.n} units."
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

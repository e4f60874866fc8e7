"""Compare movers from the same starts: how soon does a robot that one of them leads know where it is?

The lock ends an episode: a robot that trusts its pose goes to work, and is right or wrong from then on as
it was then.  A robot that never locked counts as if it had at the cap, in strips and in metres alike, so
standing still does not pay.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.ablation.statistics import Interval, bootstrap, paired_bootstrap
from learnfilter.ablation.study import Row, credited, read_rows
from learnfilter.movers.episode import EpisodeRecord


class Budgets(NamedTuple):
    """How episodes are judged.

    Attributes:
        strips, metres: after how many of them located robots are counted; the largest are the caps.
        within_m, within_rad: how near the reference an estimate counts as located.
    """

    strips: tuple[int, ...]
    metres: tuple[float, ...]
    within_m: float
    within_rad: float


class Bout(NamedTuple):
    """One mover with one model from one start.

    Attributes:
        mover, model, condition, site, unit, start: which, by name; `unit` is of evidence.
        fold, middle: of the site, see `study.Arena`.
        run: drives it.
    """

    mover: str
    model: str
    condition: str
    site: str
    unit: str
    start: str
    fold: int
    middle: tuple[float, float]
    run: Callable[[], EpisodeRecord]

    @property
    def key(self) -> tuple[str, ...]:
        return self.mover, self.model, self.condition, self.start


def run_motion_study(
    bouts: Iterable[Bout], budgets: Budgets, file: Path, tick: Callable[[str], None]
) -> list[Row]:
    """Rows of all bouts; those already in `file` are not driven again.

    Args:
        bouts: made one by one, so that few sites are held at once.
        budgets: how they are judged.
        file: JSON lines.
        tick: called with a note when a bout is done.
    """
    rows = read_rows(file)
    done = {(row["mover"], row["model"], row["condition"], row["start"]) for row in rows}
    file.parent.mkdir(parents=True, exist_ok=True)
    with file.open("a", encoding="utf-8") as out:
        for bout in bouts:
            if bout.key not in done:
                row = row_of(bout, bout.run(), budgets)
                out.write(json.dumps(row, sort_keys=True) + "\n")
                out.flush()
                rows.append(row)
            tick(f"{bout.condition}: {bout.mover}, {bout.model}")
    return rows


def row_of(bout: Bout, seen: EpisodeRecord, budgets: Budgets) -> Row:
    """What one bout came to."""
    near = credited(
        seen.estimate, seen.reference, bout.fold, bout.middle, budgets.within_m, budgets.within_rad
    )  # fmt: skip
    lock, last = seen.locked_at, len(near) - 1
    row: Row = {
        **{key: getattr(bout, key) for key in ("mover", "model", "condition", "site", "unit", "start")},
        "lock_strips": None if lock is None else lock + 1,
        "lock_metres": None if lock is None else float(seen.metres[lock]),
        "cap_strips": max(budgets.strips),
        "cap_metres": max(budgets.metres),
        "false_lock": bool(lock is not None and not seen.right[lock]),
        "moves": last,
        "contacts": int(seen.contacts[last]),
        "people_touched": int(seen.people_touched[last]),
        "milliseconds": 1e3 * float(np.median(seen.decision_s)),
    }
    for strips in budgets.strips:
        row[f"located_{strips}"] = float(near[min(strips - 1, last)])
    for metres in budgets.metres:
        within = np.searchsorted(seen.metres, metres + 1e-6, side="right") - 1
        row[f"located_{metres:g}m"] = float(near[within])
    return row


class MoverScore(NamedTuple):
    """A mover with a model, over all starts; intervals are over units of evidence.

    Attributes:
        mover, model: which.
        lock_strips, lock_metres: until the lock, means, the cap where there was none.
        median_strips, median_metres: likewise, over all starts.
        locked, false_locks: shares of starts.
        located: budget ('4' strips, '2m') -> share located within it.
        gained: likewise, less what the study's first mover located with the same model; None for itself.
        contacts, people_touched: a motion.
        milliseconds: of a decision, median.
    """

    mover: str
    model: str
    lock_strips: Interval
    lock_metres: Interval
    median_strips: float
    median_metres: float
    locked: Interval
    false_locks: Interval
    located: dict[str, Interval]
    gained: dict[str, Interval] | None
    contacts: float
    people_touched: float
    milliseconds: float


def mover_scores(rows: Sequence[Row], budgets: Budgets, rng: np.random.Generator) -> list[MoverScore]:
    """One for each pair of a model and a mover in the rows, in their order.

    Args:
        rows: of `run_motion_study`.
        budgets: they were judged by.
        rng: source of the resampling.
    """
    pairs = sorted(dict.fromkeys((row["model"], row["mover"]) for row in rows), key=lambda pair: pair[0])
    first = rows[0]["mover"]
    chosen = {
        pair: sorted(
            (row for row in rows if (row["model"], row["mover"]) == pair),
            key=lambda row: (row["condition"], row["start"]),
        )
        for pair in pairs
    }
    return [_score(chosen[pair], chosen[pair[0], first], budgets, rng) for pair in pairs]


def _score(
    rows: Sequence[Row], baseline: Sequence[Row], budgets: Budgets, rng: np.random.Generator
) -> MoverScore:
    units = [row["unit"] for row in rows]

    def mean(values: NDArray) -> Interval:
        return bootstrap(values, units, rng=rng)

    marks = [*(str(n) for n in budgets.strips), *(f"{n:g}m" for n in budgets.metres)]
    located = {mark: _column(rows, f"located_{mark}") for mark in marks}
    theirs = {mark: _column(baseline, f"located_{mark}") for mark in marks}
    strips, metres = _censored(rows, "strips"), _censored(rows, "metres")
    moves = max(_column(rows, "moves").sum(), 1.0)
    return MoverScore(
        rows[0]["mover"],
        rows[0]["model"],
        mean(strips),
        mean(metres),
        float(np.median(strips)),
        float(np.median(metres)),
        mean(np.array([row["lock_strips"] is not None for row in rows], dtype=float)),
        mean(_column(rows, "false_lock")),
        {mark: mean(values) for mark, values in located.items()},
        None if rows is baseline else {
            mark: paired_bootstrap(values, theirs[mark], units, rng=rng) for mark, values in located.items()
        },
        float(_column(rows, "contacts").sum() / moves),
        float(_column(rows, "people_touched").sum() / moves),
        float(np.median(_column(rows, "milliseconds"))),
    )  # fmt: skip


def _column(rows: Sequence[Row], key: str) -> NDArray[np.float64]:
    return np.array([row[key] for row in rows], dtype=float)


def _censored(rows: Sequence[Row], what: str) -> NDArray[np.float64]:
    """Until the lock, the cap where there was none."""
    found = [(row[f"lock_{what}"], row[f"cap_{what}"]) for row in rows]
    return np.array([cap if lock is None else min(lock, cap) for lock, cap in found], dtype=float)

"""What pages and summaries say of movers."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from learnfilter.ablation.motion_study import MoverScore
from learnfilter.ablation.statistics import Interval
from learnfilter.app.movers import StoredPolicy
from learnfilter.report import Chart, Column, Curve, Forest, Table
from learnfilter.report import Interval as Bar
from learnfilter.report.model import Cell


def practice_charts(policy: StoredPolicy | None) -> tuple[Chart, ...]:
    """What a policy missed on held-out sites, stage by stage."""
    charts = []
    for stage, facts in ({} if policy is None else policy.facts["stages"]).items():
        history = np.array(facts["history"], dtype=float)
        if len(history) > 1:
            curve = Curve("validation", history[:, 0], history[:, 2])
            charts.append(Chart(f"Policy, {stage} stage", "update", "score, less is better", (curve,)))
    return tuple(charts)


def mover_facts(policy: StoredPolicy) -> dict[str, Any]:
    """Plain values for summary.json."""
    return {
        "validation": policy.facts["validation"],
        "parameters": sum(parameter.numel() for parameter in policy.net.parameters()),
        "model": policy.facts["model"],
    }


def mover_table(scores: Sequence[MoverScore]) -> Table:
    """All movers and models, what each came to."""
    columns = (
        Column("mover"),
        Column("model"),
        Column("strips until lock", ".1f", "low"),
        Column("metres until lock", ".1f", "low"),
        Column("locked", ".2f", "high"),
        Column("locked wrongly", ".3f", "low"),
        *(Column(f"located, {_spelt(mark)}", ".2f", "high") for mark in scores[0].located),
        Column("contacts a motion", ".4f", "low"),
        Column("people touched a motion", ".4f", "low"),
        Column("ms a decision", ".2f", "low"),
    )
    rows: tuple[tuple[Cell, ...], ...] = tuple(
        (
            s.mover, s.model, _bar(s.lock_strips), _bar(s.lock_metres), _bar(s.locked), _bar(s.false_locks),
            *map(_bar, s.located.values()), s.contacts, s.people_touched, s.milliseconds,
        )
        for s in scores
    )  # fmt: skip
    note = (
        "The same starts on the same days for every mover. Means with 95 % interval, bootstrap over sites; "
        "until lock, the cap where there was none. The lock ends an episode. Contacts are with walls and "
        "things; people step aside, but were touched."
    )
    return Table("How soon robots know where they are", columns, rows, note)


def mover_forests(scores: Sequence[MoverScore]) -> tuple[Forest, ...]:
    """What movers locate more than the first one, a picture for each of them and model."""
    first = scores[0].mover
    return tuple(
        Forest(
            f"Located share gained, {s.mover} with {s.model}",
            tuple((_spelt(mark), _bar(interval)) for mark, interval in s.gained.items()),
            "share of starts", first, s.mover,
        )
        for s in scores if s.gained is not None
    )  # fmt: skip


def mover_summary(scores: Sequence[MoverScore]) -> list[dict[str, Any]]:
    """Plain values for summary.json."""
    return [{key: _plain(value) for key, value in score._asdict().items()} for score in scores]


def mover_lines(scores: Sequence[MoverScore]) -> list[str]:
    """The table for the terminal."""
    marks = list(scores[0].located)
    head = f"{'mover':<14} {'model':<24} {'strips':>8} {'metres':>8} {'wrong':>6} {'contacts':>9} {'ms':>8}"
    lines = [f"{head}  located " + " ".join(f"{mark:>5}" for mark in marks)]
    for s in scores:
        shares = " ".join(f"{s.located[mark].value:5.2f}" for mark in marks)
        lines.append(
            f"{s.mover:<14} {s.model:<24} {s.lock_strips.value:8.1f} {s.lock_metres.value:8.1f} "
            f"{s.false_locks.value:6.3f} {s.contacts:9.4f} {s.milliseconds:8.2f}          {shares}"
        )
    return lines


def mover_headline(scores: Sequence[MoverScore]) -> str:
    """The mover that locks soonest with the first model, in one sentence."""
    own = [s for s in scores if s.model == scores[0].model]
    soonest = min(own, key=lambda s: s.lock_strips.value)
    return (
        f"With {soonest.model}, {soonest.mover} lets the robot trust its pose after "
        f"{soonest.lock_strips.value:.1f} strips and {soonest.lock_metres.value:.1f} m, {own[0].mover} after "
        f"{own[0].lock_strips.value:.1f} strips and {own[0].lock_metres.value:.1f} m."
    )


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    return value.as_dict() if isinstance(value, Interval) else value


def _bar(interval: Interval) -> Bar:
    return Bar(interval.value, interval.low, interval.high)


def _spelt(mark: str) -> str:
    """A budget in words."""
    return f"within {mark[:-1]} m" if mark.endswith("m") else f"after {mark} strip{'s' * (mark != '1')}"

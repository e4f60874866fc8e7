"""Report pages of runs: judgements and training as tables, charts and episodes."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any, Literal

import numpy as np
from omegaconf import OmegaConf

from learnfilter import __version__
from learnfilter.ablation.verdict import ALL
from learnfilter.app.judging import Judgement
from learnfilter.app.models import LEARNED, Stored
from learnfilter.report import Chart, Column, Curve, Forest, Table
from learnfilter.report import Interval as Bar
from learnfilter.report.model import Cell

DEPTH_ONLY = "Depth only: the plan names no finishes, so colour gives no evidence there."
SIMULATED = (
    "Drives were simulated: things, people, light and faults are as invented as the sites. "
    "Judge the models on recorded drives before trusting them on your site."
)


def _bar(interval: Any) -> Bar:
    return Bar(interval.value, interval.low, interval.high)


def score_tables(found: Judgement) -> tuple[Table, ...]:
    """Located share and nats, one row a contender, one column a number of strips."""
    marks = sorted({score.mark for score in found.scores})
    names = list(dict.fromkeys(score.contender for score in found.scores))
    cell = {(s.contender, s.mark): s for s in found.scores}
    tables = []
    kinds: tuple[tuple[str, str, Literal["high", "low"]], ...] = (
        ("Located share after n strips", "located", "high"),
        ("Nats of the true pose after n strips", "nll", "low"),
    )
    for title, field, best in kinds:
        columns = (Column("model"), *(Column(str(mark), ".2f", best) for mark in marks))
        rows: tuple[tuple[Cell, ...], ...] = tuple(
            (name, *(_bar(getattr(cell[name, m], field)) for m in marks)) for name in names
        )
        tables.append(
            Table(title, columns, rows, "Mean over sites with 95 % interval, bootstrap over sites.")
        )
    return tuple(tables)


def forests(found: Judgement) -> tuple[Forest, ...]:
    """Paired differences, learned minus best analytic: after each number of strips, then by condition."""
    below, above = found.analytic, LEARNED
    note = f"{found.analytic} was chosen among the analytic models on validation drives."
    whole = found.differences[0].condition
    by_mark = [
        (f"after {d.mark} strip{'s' * (d.mark > 1)}", d) for d in found.differences if d.condition == whole
    ]
    drawn = [("paired", by_mark)]
    if whole == ALL:
        at = [(d.condition, d) for d in found.differences if d.mark == found.mark and d.condition != ALL]
        drawn.append((f"paired, after {found.mark} strips", at))
    return tuple(
        Forest(
            f"{title}, {how}", tuple((label, _bar(getattr(d, field))) for label, d in rows),
            unit, below, above, "+.2f", note,
        )
        for how, rows in drawn
        for title, field, unit in (
            ("Located share gained", "located", "share of drives"),
            ("Nats saved", "nll", "nats"),
        )
    )  # fmt: skip


def trust_table(found: Judgement) -> Table:
    """Whether each model's own confidence can be believed."""
    columns = (
        Column("model"),
        Column("calibration error", ".3f", "low"),
        Column("coverage error", ".3f", "low"),
        Column("metres until lock", ".1f", "low"),
        Column("locked", ".2f", "high"),
        Column("locked wrongly", ".3f", "low"),
    )
    rows: tuple[tuple[Cell, ...], ...] = tuple(
        (
            t.contender, _bar(t.calibration), _bar(t.coverage), _bar(t.lock_metres), _bar(t.locked),
            _bar(t.false_locks),
        )
        for t in found.trust
    )  # fmt: skip
    note = (
        "Calibration of 'within 0.5 m and 15 degrees of the estimate' over every strip, debiased; coverage "
        "of 50, 90 and 95 % credible sets, worst; metres until lock, the drive's length if it never locked."
    )
    return Table("How far each model's confidence can be believed", columns, rows, note)


def condition_table(found: Judgement) -> tuple[Table, ...]:
    """Gains under each condition, where several were studied."""
    own = [d for d in found.differences if d.mark == found.mark and d.condition != ALL]
    if len(own) < 2:
        return ()
    columns = (
        Column("condition"),
        Column("located share gained", "+.2f"),
        Column("nats saved", "+.2f"),
        Column("p, Holm", ".3f"),
    )
    rows: tuple[tuple[Cell, ...], ...] = tuple((d.condition, _bar(d.located), _bar(d.nll), d.p) for d in own)
    title = f"{LEARNED} minus {found.analytic} after {found.mark} strips, by condition"
    return (Table(title, columns, rows, "p: exact McNemar test, adjusted for all conditions (Holm)."),)


def score_charts(found: Judgement) -> tuple[Chart, ...]:
    """Located share against strips, a curve a contender."""
    curves = []
    for name in dict.fromkeys(score.contender for score in found.scores):
        own = [s for s in found.scores if s.contender == name]
        x = np.array([s.mark for s in own], dtype=float)
        value, low, high = (np.array([getattr(s.located, k) for s in own]) for k in ("value", "low", "high"))
        banded = bool(np.isfinite(low).all())
        curves.append(Curve(name, x, value, low if banded else None, high if banded else None))
    return (Chart("Located share", "strips weighed", "share of drives", tuple(curves), (0.0, 1.0)),)


def training_charts(models: Mapping[str, Stored]) -> tuple[Chart, ...]:
    """Training loss and validation of the matcher's stages."""
    charts = []
    for stage, facts in models[LEARNED].facts["stages"].items():
        history = np.array(facts["history"], dtype=float)
        if len(history) > 1:
            curves = (
                Curve("training loss", history[:, 0], history[:, 1]),
                Curve("validation", history[:, 0], history[:, 2]),
            )
            charts.append(Chart(f"Training, {stage} stage", "iteration", "nats", curves))
    return tuple(charts)


def size_table(models: Mapping[str, Stored], found: Judgement) -> Table:
    """Trained weights and wall time a strip on this machine."""
    rows = tuple(
        (name, models[name].facts["parameters"] if name in models else None, milliseconds)
        for name, milliseconds in found.milliseconds.items()
    )
    columns = (Column("model"), Column("trained weights", ",d"), Column("ms a strip", ".1f"))
    note = "Time of a whole filter step on this laptop, median; it says nothing of the robot's."
    return Table("Weights and time", columns, rows, note)


def provenance(settings: Any, extra: Mapping[str, str]) -> dict[str, str]:
    """Where a page comes from."""
    return {
        "learnfilter": __version__,
        "python": sys.version.split()[0],
        "command": " ".join(["learnfilter", *sys.argv[1:]]),
        "seed": str(settings.seed),
        **extra,
    }


def settings_text(settings: Any) -> str:
    """Resolved settings as YAML."""
    return OmegaConf.to_yaml(OmegaConf.create(asdict(settings)))


def _terse(share: Any) -> str:
    """A share with its interval, where there is one."""
    interval = f" ({share.low:.2f}-{share.high:.2f})" if np.isfinite(share.low) else ""
    return f"{share.value:.2f}{interval}"


def table_lines(found: Judgement) -> Sequence[str]:
    """The located table and the verdict for the terminal."""
    marks = sorted({score.mark for score in found.scores})
    cell = {(s.contender, s.mark): s for s in found.scores}
    width = max(len(s.contender) for s in found.scores)
    lines = [f"{'located share after':<{width}}  " + "".join(f"{m:>18}" for m in marks)]
    for name in dict.fromkeys(score.contender for score in found.scores):
        row = [cell[name, m].located for m in marks]
        lines.append(f"{name:<{width}}  " + "".join(f"{_terse(i):>18}" for i in row))
    return [*lines, "", *_condition_lines(found), found.verdict.sentence, found.verdict.confidence]


def _condition_lines(found: Judgement) -> Sequence[str]:
    own = [d for d in found.differences if d.mark == found.mark and d.condition != ALL]
    if len(own) < 2:
        return ()
    width = max(len(d.condition) for d in own)
    head = f"{LEARNED} minus {found.analytic} after {found.mark} strips"
    lines = [
        f"{d.condition:<{width}}  {d.located.value:+.2f} ({d.located.low:+.2f} to {d.located.high:+.2f})"
        for d in own
    ]
    return [head, *lines, ""]

"""Report pages of runs: judgements and training as tables, charts and episodes."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any, Literal

import numpy as np
from omegaconf import OmegaConf

from learnfilter import __version__
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
    """Paired differences, learned minus best analytic."""
    label = {d.mark: f"after {d.mark} strip{'s' * (d.mark > 1)}" for d in found.differences}
    rows_located = tuple((label[d.mark], _bar(d.located)) for d in found.differences)
    rows_nll = tuple((label[d.mark], _bar(d.nll)) for d in found.differences)
    below, above = found.analytic, LEARNED
    note = f"{found.analytic} was chosen among the analytic models on validation drives."
    return (
        Forest("Located share gained, paired", rows_located, "share of drives", below, above, "+.2f", note),
        Forest("Nats saved, paired", rows_nll, "nats", below, above, "+.2f", note),
    )


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
    return [*lines, "", found.verdict.sentence, found.verdict.confidence]

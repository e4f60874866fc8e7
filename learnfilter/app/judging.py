"""Judge trained models on sites they have not seen: rows, tables, verdict, episodes to watch."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import torch

from learnfilter.ablation.study import MARKS, Contender, Row, run_study
from learnfilter.ablation.verdict import (
    Difference,
    Score,
    Verdict,
    choose_analytic,
    decide,
    differences,
    scores,
)
from learnfilter.app.models import LEARNED, Stored
from learnfilter.app.progress import progress
from learnfilter.core.files import whole_file
from learnfilter.core.lock import Lock
from learnfilter.core.poses import compose, inverse
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip
from learnfilter.filtering.course import Ground
from learnfilter.filtering.trace import trace
from learnfilter.plan import FloorPlan
from learnfilter.report import Episode, Placement, Track


class Judgement(NamedTuple):
    """What a study found.

    Attributes:
        rows: one a contender and drive.
        scores, differences: tables.
        analytic: the best analytic model, chosen on validation drives.
        verdict: one sentence.
        milliseconds: contender -> median wall time of a strip.
    """

    rows: list[Row]
    scores: list[Score]
    differences: list[Difference]
    analytic: str
    verdict: Verdict
    milliseconds: dict[str, float]

    def summary(self) -> dict[str, Any]:
        """Plain values for summary.json."""
        return {
            "best_analytic": self.analytic,
            "verdict": self.verdict._asdict(),
            "scores": [
                {
                    "contender": s.contender,
                    "strips": s.mark,
                    "located": s.located.as_dict(),
                    "nll": s.nll.as_dict(),
                }
                for s in self.scores
            ],
            "differences": [
                {"strips": d.mark, "located_gain": d.located.as_dict(), "nll_gain": d.nll.as_dict()}
                for d in self.differences
            ],
            "milliseconds_a_strip": self.milliseconds,
            "drives": len({row["drive"] for row in self.rows}),
            "sites": len({row["site"] for row in self.rows}),
        }


def contenders_of(models: dict[str, Stored], hide_colour: bool) -> list[Contender]:
    """Every model as a contender; the learned one also with colour hidden, where it has seen any."""
    contenders = [model.contender() for model in models.values()]
    if hide_colour and LEARNED in models and any("colour" in name for name in models):
        contenders.append(models[LEARNED].contender(hide_colour=True))
    return contenders


def judge_models(
    models: dict[str, Stored],
    grounds: Sequence[Ground],
    condition: str,
    folder: Path,
    mark: int,
    seed: int,
    hide_colour: bool,
) -> Judgement:
    """Run the study, write its rows as Parquet, and decide.

    Args:
        models: of a training run, the learned one among them.
        grounds: unseen sites with drives.
        condition: name of what the drives were made under.
        folder: gets rows.jsonl and rows.parquet.
        mark: strips after which the verdict is given.
        seed: of the bootstrap.
        hide_colour: also judge the learned model without colour.
    """
    contenders = contenders_of(models, hide_colour)
    with progress("ablation") as tick:
        rows = run_study(contenders, grounds, condition, folder / "rows.jsonl", tick)
    write_rows(rows, folder / "rows.parquet")
    analytic = choose_analytic({name: m.facts["validation"] for name, m in models.items() if not m.learned})
    found = differences(rows, LEARNED, analytic, stream(seed, "differences"))
    names = [contender.name for contender in contenders]
    return Judgement(
        rows,
        scores(rows, names, stream(seed, "scores")),
        found,
        analytic,
        decide(rows, LEARNED, analytic, found, mark),
        {n: float(np.median([r["milliseconds"] for r in rows if r["contender"] == n])) for n in names},
    )


def write_rows(rows: Sequence[Row], path: Path) -> None:
    """Rows of a study as Parquet, a column for every key that any row has."""
    names = dict.fromkeys(key for row in rows for key in row)
    with whole_file(path) as beside:
        pq.write_table(pa.table({name: [row.get(name) for row in rows] for name in names}), beside)


def watch(
    models: Sequence[Stored], ground: Ground, plan: FloorPlan, strip: Strip, number: int = 0
) -> Episode:
    """One drive through several models, for the page."""
    course = ground.courses[number]
    steps = min(course.length, max(MARKS))
    back = inverse(np.asarray(strip.mount))
    tracks = []
    for model in models:
        with torch.no_grad():
            features = model.model.read(ground.site)
        seen = trace(
            model.model,
            model.motion,
            ground.site,
            course,
            model.facts["floor"],
            steps,
            features,
            keep_marginals=True,
        )
        assert seen.marginals is not None
        near = np.array(
            [_near(m, ground, pose) for m, pose in zip(seen.marginals, course.poses, strict=False)]
        )
        tracks.append(
            Track(
                model.name, seen.marginals, compose(seen.estimate, back), seen.entropy, near, _held(seen.mass)
            )
        )
    grid = ground.site.grid
    depth = course.steps.strips.depth_m[:steps].numpy()
    return Episode(
        course.name,
        plan,
        Placement(grid.left_m, grid.bottom_m, grid.cell_m),
        tuple(tracks),
        ground.site.layout.strip_bearings(),
        depth,
        compose(course.poses[:steps], back),
        strip.mount,
    )


def _near(plane: np.ndarray, ground: Ground, pose: np.ndarray) -> float:
    """Belief within half a metre of the reference, headings summed."""
    grid = ground.site.grid
    square = (grid.x_centres() - pose[0]) ** 2 + (grid.y_centres()[:, None] - pose[1]) ** 2
    return float(plane[square <= 0.25].sum())


def _held(mass: np.ndarray) -> np.ndarray:
    """Whether the lock is held after each strip."""
    lock, held = Lock(), []
    for value in mass:
        lock = lock.after(float(value))
        held.append(lock.held)
    return np.array(held)

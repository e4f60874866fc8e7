"""Judge trained models on sites they have not seen: rows, tables, verdict, episodes to watch."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from itertools import count, islice
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from learnfilter.ablation.statistics import Interval
from learnfilter.ablation.study import Arena, Contender, Filter, Marks, Row, run_study
from learnfilter.ablation.trust import Trust, trust
from learnfilter.ablation.verdict import (
    Difference,
    Score,
    Verdict,
    choose_analytic,
    conditions_of,
    decide,
    differences,
    scores,
)
from learnfilter.app.config import hold
from learnfilter.app.grounds import Place
from learnfilter.app.knowing import oracle_trace
from learnfilter.app.models import LEARNED, Stored
from learnfilter.app.progress import progress
from learnfilter.app.recipes import StudyConfig
from learnfilter.app.studying import Subject, arena_of
from learnfilter.core.files import whole_file
from learnfilter.core.lock import Lock
from learnfilter.core.poses import compose, inverse
from learnfilter.core.seeds import stream
from learnfilter.filtering.course import Ground
from learnfilter.filtering.trace import Trace, trace
from learnfilter.report import Episode, Placement, Track


class Judgement(NamedTuple):
    """What a study found.

    Attributes:
        rows: one a contender and drive.
        scores: tables over all conditions.
        differences: learned minus best analytic, over all conditions and under each.
        trust: how far each contender's confidence can be believed.
        analytic: the best analytic model, chosen on validation drives.
        verdict: one sentence.
        mark: strips after which it is given.
        milliseconds: contender -> median wall time of a strip.
    """

    rows: list[Row]
    scores: list[Score]
    differences: list[Difference]
    trust: list[Trust]
    analytic: str
    verdict: Verdict
    mark: int
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
                {
                    "condition": d.condition,
                    "strips": d.mark,
                    "located_gain": d.located.as_dict(),
                    "nll_gain": d.nll.as_dict(),
                    "p": d.p,
                }
                for d in self.differences
            ],
            "trust": [
                {key: v.as_dict() if isinstance(v, Interval) else v for key, v in t._asdict().items()}
                for t in self.trust
            ],
            "milliseconds_a_strip": self.milliseconds,
            "conditions": conditions_of(self.rows),
            "drives": len({(row["condition"], row["drive"]) for row in self.rows}),
            "sites": len({row["site"] for row in self.rows}),
        }


class Oracle:
    """The filter that knows all of the simulation, as a contender: what could be gained at most."""

    name = "oracle"

    def on(self, arena: Arena) -> Callable[[int, int], Trace]:
        def run(number: int, strips: int) -> Trace:
            world, drive = arena.worlds[number]
            ground = arena.ground
            return oracle_trace(world, drive, ground.courses[number], ground.site.grid, strips)

        return run


def contenders_of(models: dict[str, Stored], hide_colour: bool) -> list[Filter]:
    """Every model as a contender; the learned one also with colour hidden, where it has seen any."""
    contenders = [model.contender() for model in models.values()]
    if hide_colour and LEARNED in models and any("colour" in name for name in models):
        contenders.append(models[LEARNED].contender(hide_colour=True))
    return contenders


def judge_models(
    models: dict[str, Stored], subject: Subject, study: StudyConfig, folder: Path, seed: int
) -> Judgement:
    """Run the study, write its rows as Parquet, and decide.

    Args:
        models: those to compare, see `compared`.
        subject: unseen sites with drives.
        study: how they are judged.
        folder: gets rows.jsonl and rows.parquet.
        seed: of the bootstrap.
    """
    contenders: list[Contender] = [*contenders_of(models, study.hide_colour)]
    if study.oracle:
        contenders.append(Oracle())
    common, others = models[LEARNED].lattices, [model.lattices for model in models.values()]
    total, done = subject.count * len(contenders), count()
    with progress("ablation") as tick:
        arenas = (
            arena_of(condition, place, common, others, subject.cache) for condition, place in subject.places()
        )
        rows = run_study(
            contenders, arenas, marks_for(study), folder / "rows.jsonl",
            lambda note: tick(next(done) + 1, total, note),
        )  # fmt: skip
    write_rows(rows, folder / "rows.parquet")
    analytic = choose_analytic({name: m.facts["validation"] for name, m in models.items() if not m.learned})
    found = differences(rows, LEARNED, analytic, stream(seed, "differences"))
    names = [contender.name for contender in contenders]
    return Judgement(
        rows,
        scores(rows, names, stream(seed, "scores")),
        found,
        [trust(rows, name, stream(seed, "trust")) for name in names],
        analytic,
        decide(rows, LEARNED, analytic, found, study.mark),
        study.mark,
        {n: float(np.median([r["milliseconds"] for r in rows if r["contender"] == n])) for n in names},
    )


def compared(models: dict[str, Stored], names: Sequence[str] | None) -> dict[str, Stored]:
    """The models that a study compares: the learned one, and at least one analytic one.

    Raises:
        ConfigError: a name the run does not have, or too few.
    """
    chosen = models if names is None else {name: models[name] for name in names if name in models}
    good = (names is None or len(chosen) == len(names)) and LEARNED in chosen and len(chosen) > 1
    hold("study.models", good, f"{LEARNED} and some of {', '.join(models)}", names)
    return chosen


def marks_for(study: StudyConfig) -> Marks:
    """How drives are judged."""
    return Marks(tuple(study.marks), study.within_m, math.radians(study.within_deg))


def write_rows(rows: Sequence[Row], path: Path) -> None:
    """Rows of a study as Parquet, a column for every key that any row has."""
    names = dict.fromkeys(key for row in rows for key in row)
    with whole_file(path) as beside:
        pq.write_table(pa.table({name: [row.get(name) for row in rows] for name in names}), beside)


WATCHED = 32  # strips of an episode on a page


def watch_first(
    models: Sequence[Stored], subject: Subject, sites: int, drives: int = 1
) -> tuple[Episode, ...]:
    """The first drives on the first sites through several models, for the page."""
    return tuple(
        watch(models, place, number, subject.cache)
        for _, place in islice(subject.places(), sites)
        for number in range(min(drives, len(place.drives)))
    )


def watch(models: Sequence[Stored], place: Place, number: int, cache: Path | None) -> Episode:
    """One drive through several models."""
    lattices = models[-1].lattices
    ground = lattices.ground(lattices.render(place.plan, cache), [place.drives[number]])
    (course,) = ground.courses
    steps = min(course.length, WATCHED)
    back = inverse(np.asarray(place.drives[number].strip.mount))
    tracks = []
    for model in models:
        own = ground if model.lattices == lattices else model.lattices.ground(
            model.lattices.render(place.plan, cache), [place.drives[number]]
        )  # fmt: skip
        seen = trace(
            model.model, model.motion, own.site, own.courses[0], model.facts["floor"], steps,
            keep_marginals=True, scored=course.scored_on(ground.site),
        )  # fmt: skip
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
    return Episode(
        course.name,
        place.plan,
        Placement(grid.left_m, grid.bottom_m, grid.cell_m),
        tuple(tracks),
        ground.site.layout.strip_bearings(),
        course.steps.strips.depth_m[:steps].numpy(),
        compose(course.poses[:steps], back),
        place.drives[number].strip.mount,
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

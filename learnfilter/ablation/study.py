"""Run contenders over courses and write one row a drive as soon as it is done.

Rows are JSON lines, appended and flushed one by one, so a killed study is taken up where it stopped.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Hashable, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, NamedTuple, Protocol

import numpy as np
import torch

from learnfilter.core.errors import InputError
from learnfilter.core.memory import give_back_memory
from learnfilter.core.poses import compose
from learnfilter.drives.metrics import WITHIN_M, WITHIN_RAD, first_lock, located, travelled
from learnfilter.filtering.course import Course, Ground
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import Memory, Trace, trace
from learnfilter.observe.contract import ObservationModel

MARKS = (1, 2, 4, 8, 16, 32)  # strips after which a filter is judged, where nothing else is asked

Row = dict[str, Any]


class Arena(NamedTuple):
    """One site on which contenders are judged, under one condition.

    Attributes:
        condition: name of what the drives were made under.
        ground: the site on the common lattice, on which every belief is scored.
        others: the same drives on lattices of contenders that have their own.
        fold: the plan is invariant under a turn of 2 pi / fold about the middle of its bounds: the
            poses of all turns are equally right, since nothing can tell them apart.
        middle: that middle, metres.
        units: the unit of evidence each drive belongs to; empty: all belong to the site.
        worlds: what was there on each drive, for a contender that knows how to read it.
    """

    condition: str
    ground: Ground
    others: Mapping[Hashable, Ground] = {}
    fold: int = 1
    middle: tuple[float, float] = (0.0, 0.0)
    units: tuple[str, ...] = ()
    worlds: tuple[Any, ...] = ()


class Marks(NamedTuple):
    """How drives are judged.

    Attributes:
        strips: numbers of strips after which they are.
        within_m, within_rad: how near the reference an estimate counts as located.
    """

    strips: tuple[int, ...] = MARKS
    within_m: float = WITHIN_M
    within_rad: float = float(WITHIN_RAD)


class Contender(Protocol):
    """A filter under test."""

    @property
    def name(self) -> str:
        """Of the row in every table."""

    def on(self, arena: Arena) -> Callable[[int, int], Trace]:
        """Get ready for a site; returns (number of the drive, strips) -> what it believed."""


class Filter(NamedTuple):
    """A model and its motion as a contender.

    Attributes:
        name: of the row in every table.
        model, motion, floor: the filter.
        lattice: key of its own lattice in `Arena.others`; None for the common one.
        hide_colour: whether its strips lose their colour.
    """

    name: str
    model: ObservationModel
    motion: MotionModel
    floor: float
    lattice: Hashable = None
    hide_colour: bool = False

    def on(self, arena: Arena) -> Callable[[int, int], Trace]:
        ground = arena.others.get(self.lattice, arena.ground)
        with torch.no_grad():
            features = self.model.read(ground.site)
        memory: Memory = {}  # recorded drives are cut at every start, and share their strips

        def run(drive: int, strips: int) -> Trace:
            course = ground.courses[drive]
            if self.hide_colour:
                bare = course.steps.strips.without_colour()
                course = course._replace(steps=course.steps._replace(strips=bare))
            scored = arena.ground.courses[drive].scored_on(arena.ground.site)
            return trace(
                self.model, self.motion, ground.site, course, self.floor, strips, features, scored=scored,
                memory=memory,
            )  # fmt: skip

        return run


def run_study(
    contenders: Sequence[Contender],
    arenas: Iterable[Arena],
    marks: Marks,
    file: Path,
    tick: Callable[[str], None],
) -> list[Row]:
    """Rows of all contenders on all drives; those already in `file` are not run again.

    Args:
        contenders: filters.
        arenas: sites none has seen; made one by one, so that they need not all be held at once.
        marks: how drives are judged.
        file: JSON lines.
        tick: called with a note when a contender is done with a site.
    """
    rows = read_rows(file)
    done = {(row["contender"], row["condition"], row["drive"]) for row in rows}
    file.parent.mkdir(parents=True, exist_ok=True)
    with file.open("a", encoding="utf-8") as out:
        for arena in arenas:
            give_back_memory()
            for contender in contenders:
                for row in _rows_on(contender, arena, marks, done):
                    out.write(json.dumps(row, sort_keys=True) + "\n")
                    out.flush()
                    rows.append(row)
                tick(f"{arena.condition}: {contender.name}")
    return rows


def _rows_on(contender: Contender, arena: Arena, marks: Marks, done: set[tuple]) -> Iterable[Row]:
    courses = arena.ground.courses
    wanted = [
        number
        for number, course in enumerate(courses)
        if (contender.name, arena.condition, course.name) not in done
    ]
    if not wanted:
        return
    run = contender.on(arena)
    for number in wanted:
        seen = run(number, max(marks.strips))
        yield {
            "contender": contender.name,
            "condition": arena.condition,
            "site": arena.ground.site.name,
            "unit": arena.units[number] if arena.units else arena.ground.site.name,
            **_row(seen, courses[number], arena, marks),
        }


def _row(seen: Trace, course: Course, arena: Arena, marks: Marks) -> Row:
    """What one drive came to."""
    count = len(seen.estimate)
    poses = course.poses[:count]
    right = located(seen.estimate, poses)
    alike = credited(seen.estimate, poses, arena.fold, arena.middle, marks.within_m, marks.within_rad)
    metres = travelled(course.steps.odometry.numpy())
    lock = first_lock(seen.mass)
    row: Row = {
        "drive": course.name,
        "lock_metres": None if lock is None else float(metres[lock]),
        "cap_metres": float(metres[count - 1]),
        "false_lock": bool(lock is not None and right[lock] == 0),
        "milliseconds": 1e3 * seen.seconds,
        "right": right.tolist(),
        "mass": _rounded(seen.mass),
        "rank": _rounded(seen.rank),
    }
    for mark in marks.strips:
        if mark <= count:
            row[f"located_{mark}"] = float(alike[mark - 1])
            row[f"nll_{mark}"] = float(-seen.log_truth[mark - 1])
    return row


def credited(
    estimate: np.ndarray,
    reference: np.ndarray,
    fold: int,
    middle: tuple[float, float],
    within_m: float,
    within_rad: float,
) -> np.ndarray:
    """[s] whether each estimate [s 3] is near the reference [s 3], or where a symmetric plan turns it to.

    That is for the located share alone.  Confidence and locks are held to the one true pose: a filter
    that is sure of one of two poses that nothing can tell apart is too sure.  `fold` and `middle` are those
    of an Arena, the others those of Marks.
    """
    near = np.zeros(len(estimate))
    arm = reference - [*middle, 0.0]
    for turn in 2 * np.pi * np.arange(fold) / fold:
        place = compose(np.array([*middle, turn]), arm)
        near = np.maximum(near, located(estimate, place, within_m, within_rad))
    return near


def _rounded(values: np.ndarray) -> list[float]:
    return [round(float(value), 6) for value in values]


def read_rows(file: Path) -> list[Row]:
    """Rows of an earlier run; a last line cut short by a kill is dropped and will be run again.

    Raises:
        InputError: a line before the last is no JSON.
    """
    if not file.exists():
        return []
    text = file.read_text(encoding="utf-8")
    lines = text.split("\n")
    whole, rest = lines[:-1], lines[-1]
    if rest:
        file.write_text("".join(f"{line}\n" for line in whole), encoding="utf-8")
    rows = []
    for number, line in enumerate(whole, start=1):
        try:
            rows.append(json.loads(line))
        except json.JSONDecodeError as error:
            raise InputError("not a row of a study", file=file, place=f"line {number}", got=error) from error
    return rows

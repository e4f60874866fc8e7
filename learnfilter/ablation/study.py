"""Run contenders over courses and write one row a drive as soon as it is done.

Rows are JSON lines, appended and flushed one by one, so a killed study is taken up where it stopped.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NamedTuple

import torch

from learnfilter.core.errors import InputError
from learnfilter.core.memory import give_back_memory
from learnfilter.drives.metrics import first_lock, located, travelled
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import trace
from learnfilter.observe.contract import ObservationModel

MARKS = (1, 2, 4, 8, 16, 32)  # strips after which a filter is judged

Row = dict[str, Any]


class Contender(NamedTuple):
    """A filter under test.

    Attributes:
        name: of the row in every table.
        model, motion, floor: the filter.
        learned: whether it is on the learned side of the comparison.
        hide_colour: whether its strips lose their colour.
    """

    name: str
    model: ObservationModel
    motion: MotionModel
    floor: float
    learned: bool
    hide_colour: bool = False


def run_study(
    contenders: Sequence[Contender],
    grounds: Sequence[Ground],
    condition: str,
    file: Path,
    tick: Callable[[int, int, str], None],
) -> list[Row]:
    """Rows of all contenders on all courses; those already in `file` are not run again.

    Args:
        contenders: filters.
        grounds: sites they have not seen.
        condition: name of the condition the drives were made under.
        file: JSON lines.
        tick: (done, total, note).
    """
    rows = read_rows(file)
    done = {(row["contender"], row["condition"], row["drive"]) for row in rows}
    total = len(contenders) * sum(len(ground.courses) for ground in grounds)
    count = 0
    file.parent.mkdir(parents=True, exist_ok=True)
    with file.open("a", encoding="utf-8") as out:
        for ground in grounds:
            give_back_memory()
            for contender in contenders:
                for row in _rows_on(contender, ground, condition, done):
                    out.write(json.dumps(row, sort_keys=True) + "\n")
                    out.flush()
                    rows.append(row)
                count += len(ground.courses)
                tick(count, total, f"{condition}: {contender.name}")
    return rows


def _rows_on(contender: Contender, ground: Ground, condition: str, done: set[tuple]) -> list[Row]:
    wanted = [c for c in ground.courses if (contender.name, condition, c.name) not in done]
    if not wanted:
        return []
    with torch.no_grad():
        features = contender.model.read(ground.site)
    rows = []
    for course in wanted:
        steps = course.steps
        if contender.hide_colour:
            steps = steps._replace(strips=steps.strips.without_colour())
        result = trace(
            contender.model, contender.motion, ground.site, course._replace(steps=steps), contender.floor,
            max(MARKS), features,
        )  # fmt: skip
        right = located(result.estimate, course.poses[: len(result.estimate)])
        metres = travelled(steps.odometry.numpy())
        lock = first_lock(result.mass)
        row: Row = {
            "contender": contender.name,
            "condition": condition,
            "site": ground.site.name,
            "drive": course.name,
            "lock_metres": None if lock is None else float(metres[lock]),
            "cap_metres": float(metres[len(result.estimate) - 1]),
            "false_lock": None if lock is None else bool(right[lock] == 0),
            "milliseconds": 1e3 * result.seconds,
        }
        for mark in MARKS:
            if mark <= len(result.estimate):
                row[f"located_{mark}"] = float(right[mark - 1])
                row[f"nll_{mark}"] = float(-result.log_truth[mark - 1])
        rows.append(row)
    return rows


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

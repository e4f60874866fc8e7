"""What a drive table must hold, whatever its format: checked on reading and before writing.

Columns are NumPy arrays by name: the scalars [t], `depth_m` [t w] and, where the sensor sees
colour, `rgb` [t 3w], where NaN means no colour measured.  Rows are counted from 0 in every message.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError

ODOMETRY = ("forward_m", "left_m", "turn_rad")
REFERENCE = ("x_m", "y_m", "heading_rad")
REQUIRED = ("time_s", *ODOMETRY, "depth_m")

LISTS = ("depth_m", "rgb")

Columns = Mapping[str, NDArray]


class Table(NamedTuple):
    """An open table.

    Attributes:
        members: its description (see `description.py`).
        present: names of its columns.
        batches: batches(rows, names) reads runs of at most so many rows, from the first row on.
    """

    members: dict[str, Any]
    present: Sequence[str]
    batches: Callable[[int, Sequence[str]], Iterator[Columns]]


def used_columns(present: Collection[str], file: Path) -> tuple[str, ...]:
    """Columns to read of those present.

    Raises:
        DriveError: a required column is missing, or the reference pose has some of its three.
    """
    some_reference = any(name in present for name in REFERENCE)
    wanted = REQUIRED + (REFERENCE if some_reference else ())
    missing = [name for name in wanted if name not in present]
    if missing:
        raise DriveError(
            "missing columns",
            file=file,
            place="header",
            expected=", ".join(wanted),
            got=f"a table without {', '.join(missing)}",
        )
    return wanted + (("rgb",) if "rgb" in present else ())


def refuse_empty(rows: int, file: Path) -> None:
    """Raise DriveError for a table without a row."""
    if rows == 0:
        raise DriveError("the table is empty", file=file, expected="at least one row", got="none")


def check_rows(columns: Columns, *, file: Path, first_row: int = 0, before_s: float = -np.inf) -> None:
    """Refuse rows no filter should be fed.

    Args:
        columns: a run of rows.
        file: for messages.
        first_row: number of the run's first row in the table.
        before_s: time of the row before the run, seconds.

    Raises:
        DriveError: names the first offending row and its column.
    """

    def refuse(bad: NDArray, name: str, message: str, expected: str) -> None:
        if not bad.any():
            return
        row, *column = map(int, np.argwhere(bad)[0])
        place = f"row {first_row + row}, column {name}" + "".join(f"[{c}]" for c in column)
        raise DriveError(
            message, file=file, place=place, expected=expected, got=columns[name][(row, *column)]
        )

    time = columns["time_s"]
    refuse(~np.isfinite(time), "time_s", "time is not a number", "seconds")
    later = np.diff(time, prepend=before_s) > 0
    refuse(~later, "time_s", "time does not increase", "a time after the previous row's")
    for name in ODOMETRY:
        refuse(~np.isfinite(columns[name]), name, "odometry is not a number", "a finite number")
        moved = (columns[name] != 0) & (np.arange(len(time)) + first_row == 0)
        refuse(moved, name, "odometry before the first strip", "0 in the first row")
    refuse(columns["depth_m"] < 0, "depth_m", "negative depth", "metres >= 0, or NaN for no return")
    if "rgb" in columns:
        _check_colour_width(columns, file)
        rgb = columns["rgb"]
        refuse((rgb < 0) | (rgb > 1), "rgb", "colour out of range", "sRGB in [0, 1]")
    for name in REFERENCE if "x_m" in columns else ():
        partly = np.isnan(columns[name]) & np.isfinite(columns["x_m"])
        refuse(partly | np.isinf(columns[name]), name, "half a reference pose", "all of it finite, or NaN")


def _check_colour_width(columns: Columns, file: Path) -> None:
    depths, colours = columns["depth_m"].shape[1], columns["rgb"].shape[1]
    if colours != 3 * depths:
        raise DriveError(
            "colour does not fit depth",
            file=file,
            place="column rgb",
            expected=f"3 x {depths} = {3 * depths} values a row",
            got=colours,
        )

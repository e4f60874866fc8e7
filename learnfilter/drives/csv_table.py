"""CSV drive tables: a column a number, the description in a first line `# learnfilter {...}`.

An empty cell is NaN; other lines that start with # are left out.
"""

from __future__ import annotations

import csv
import json
import math
import re
from collections.abc import Iterator, Sequence
from itertools import islice
from pathlib import Path
from typing import Any, TextIO

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.drives.columns import LISTS, Columns, Table
from learnfilter.drives.description import parse_description

MARK = "# learnfilter "


def open_csv(path: Path) -> Table:
    """Look at header and description; raises DriveError where they are damaged or incomplete."""

    def lines() -> Iterator[list[str]]:
        """Header, then rows; blank lines and the description left out."""
        try:
            with _text(path) as file:
                yield from filter(None, csv.reader(line for line in file if line[0] != "#"))
        except (OSError, csv.Error) as error:
            raise DriveError(f"not a readable CSV file ({error})", file=path) from error

    header = [name.strip() for name in next(lines(), [])]
    groups = _groups(header, path)

    def batches(batch_rows: int, names: Sequence[str]) -> Iterator[Columns]:
        rows = islice(lines(), 1, None)
        row = 0
        while block := list(islice(rows, batch_rows)):
            for number, cells in enumerate(block, row):
                if len(cells) != len(header):
                    raise DriveError(
                        "row of another length",
                        file=path,
                        place=f"row {number}",
                        expected=f"{len(header)} cells",
                        got=len(cells),
                    )
            yield {name: _array(block, groups[name], header, name, row, path) for name in names}
            row += len(block)

    return Table(_members(path), tuple(groups), batches)


def _text(path: Path) -> TextIO:
    """Bytes that are no UTF-8 become marks, which the row's check then names as no number."""
    return path.open(newline="", encoding="utf-8-sig", errors="replace")


def _members(path: Path) -> dict[str, Any]:
    with _text(path) as file:
        first = file.readline()
    return parse_description(first.removeprefix(MARK), path) if first.startswith(MARK) else {}


def _groups(header: list[str], path: Path) -> dict[str, list[int]]:
    """Which cells of a row make each column; depth and colour gather theirs in order."""
    place_of = {name: place for place, name in enumerate(header)}
    width = sum(bool(re.fullmatch(r"depth_m_\d+", name)) for name in header)
    depth = [f"depth_m_{i:03d}" for i in range(width)]
    colour = [f"{part}_{i:03d}" for i in range(width) for part in ("red", "green", "blue")]
    has_colour = any(re.fullmatch(r"(red|green|blue)_\d+", name) for name in header)
    missing = [name for name in depth + colour * has_colour if name not in place_of]
    if missing:
        raise DriveError(
            "missing columns",
            file=path,
            place="header",
            expected=f"columns 000 to {width - 1:03d} of depth (and of each colour, or none)",
            got=f"a table without {missing[0]}",
        )
    groups = {name: [place] for name, place in place_of.items()}
    groups |= {"depth_m": [place_of[name] for name in depth]} if depth else {}
    return groups | ({"rgb": [place_of[name] for name in colour]} if has_colour else {})


def _array(
    block: list[list[str]], places: list[int], header: list[str], name: str, row: int, path: Path
) -> NDArray:
    """[t] float64, or [t w] float32 for the lists."""

    def number(text: str, row: int, place: int) -> float:
        try:
            return float(text) if text else math.nan
        except ValueError as error:
            raise DriveError(
                "not a number",
                file=path,
                place=f"row {row}, column {header[place]}",
                expected="a number, or nothing",
                got=repr(text),
            ) from error

    values = np.array([[number(cells[p], i, p) for p in places] for i, cells in enumerate(block, row)])
    return values.astype(np.float32) if name in LISTS else values[:, 0]


def write_csv(path: Path, columns: Columns, members: dict[str, Any]) -> None:
    """Write checked columns; floats as the shortest text that reads back as the same float."""
    width = columns["depth_m"].shape[1]
    header = [name for name in columns if name not in LISTS] + [f"depth_m_{i:03d}" for i in range(width)]
    if "rgb" in columns:
        header += [f"{part}_{i:03d}" for i in range(width) for part in ("red", "green", "blue")]
    with path.open("w", newline="", encoding="utf-8") as file:
        file.write(MARK + json.dumps(members, sort_keys=True, allow_nan=False) + "\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        for start in range(0, len(columns["time_s"]), 1024):
            rows = slice(start, start + 1024)
            cells = zip(
                *(array[rows].reshape(len(array[rows]), -1) for array in columns.values()), strict=True
            )
            writer.writerows([_number(value) for array in row for value in array] for row in cells)


def _number(value: np.floating) -> str:
    """The shortest text that reads back as the same float; NumPy's own printing obeys global settings."""
    return np.format_float_positional(value, unique=True, trim="-") if np.isfinite(value) else str(value)

"""Drive tables: one row a strip, as Parquet (list columns) or CSV (a column a number).

Both hold `time_s`, `forward_m`, `left_m`, `turn_rad`, optionally `x_m`, `y_m`, `heading_rad`, and
the strip.  Parquet has `depth_m` (list of W) and, with colour, `rgb` (list of 3 W, column by
column).  CSV has `depth_m_000` ... and `red_000`, `green_000`, `blue_000` ....  `description.py`
says what the file tells of its sensor, `columns.py` what every row must hold.  Columns we do not
know are left alone.  Arrays come back bit for bit; depth and colour are float32.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.core.files import whole_file
from learnfilter.core.strip import Strip
from learnfilter.drives.columns import (
    ODOMETRY,
    REFERENCE,
    Columns,
    Table,
    check_rows,
    refuse_empty,
    used_columns,
)
from learnfilter.drives.csv_table import open_csv, write_csv
from learnfilter.drives.description import DEPTH_KINDS, check_description, describe, strip_from
from learnfilter.drives.drive import Drive
from learnfilter.drives.parquet_table import open_parquet, write_parquet


class _Format(NamedTuple):
    open: Callable[[Path], Table]
    write: Callable[[Path, Columns, dict[str, Any]], None]


def read_drive(path: str | Path, strip: Strip | None = None, *, depth_kind: str | None = None) -> Drive:
    """Read a whole drive; see `iter_rows` for arguments and errors."""
    parts = list(iter_rows(path, strip, depth_kind=depth_kind))

    def whole(name: str) -> Any:
        arrays = [getattr(part, name) for part in parts]
        return None if arrays[0] is None else np.concatenate(arrays)

    names = ("time_s", "odometry", "depth_m", "rgb", "reference")
    return replace(parts[0], **{name: whole(name) for name in names})


def iter_rows(
    path: str | Path, strip: Strip | None = None, batch_rows: int = 1024, *, depth_kind: str | None = None
) -> Iterator[Drive]:
    """Read a drive in runs of rows, for drives longer than memory.

    Args:
        path: a table ending in .parquet or .csv.
        strip: the sensor; where given it wins over the file's description.  Where neither says a
            maximum range, the largest reading serves, so that none is lost.
        batch_rows: most rows in a run.
        depth_kind: "range" along the bearing, or "axis" (depth cameras: distance along the sensor's
            forward axis), converted here; None asks the file, which means "range" by default.

    Yields:
        Drives in file order.  Columns stay in raw order; readings outside the strip's ranges are
        NaN; `strip.has_colour` is false where the table has no colour.

    Raises:
        DriveError: at the first thing that is wrong, naming file, row and column.
    """
    path = Path(path)
    table = _format(path).open(path)
    check_description(table.members, path)
    names = used_columns(table.present, path)
    kind = depth_kind or table.members.get("depth_kind", "range")
    sensor, before_s, row = None, -math.inf, 0
    came_back = measured = False
    for columns in table.batches(batch_rows, names):
        check_rows(columns, file=path, first_row=row, before_s=before_s)
        if sensor is None:
            sensor = _sensor(strip, table, columns, path)
            stretch = _stretch(sensor, kind, path)
            if math.isinf(sensor.max_range_m):
                sensor = replace(sensor, max_range_m=_largest_reading(table, stretch))
        drive = _drive(columns, sensor, stretch, table.members, path)
        came_back |= bool(np.isfinite(columns["depth_m"]).any())
        measured |= bool(np.isfinite(drive.depth_m).any())
        yield drive
        row, before_s = row + len(columns["time_s"]), columns["time_s"][-1]
    refuse_empty(row, path)
    if came_back and not measured:
        raise DriveError(
            "no reading is within the strip's ranges", file=path, place="column depth_m", expected="metres"
        )


def write_drive(drive: Drive, path: str | Path) -> None:
    """Write a drive whole or not at all; what a reader would refuse is refused here.

    Raises:
        DriveError: unknown suffix, or rows that break the format's rules.
    """
    path = Path(path)
    columns: dict[str, NDArray] = {"time_s": np.asarray(drive.time_s, np.float64)}
    columns |= dict(zip(ODOMETRY, np.asarray(drive.odometry, np.float64).T, strict=True))
    if drive.reference is not None:
        columns |= dict(zip(REFERENCE, np.asarray(drive.reference, np.float64).T, strict=True))
    columns["depth_m"] = np.asarray(drive.depth_m, np.float32)
    if drive.rgb is not None:
        columns["rgb"] = np.asarray(drive.rgb, np.float32).reshape(len(drive), -1)
    writer = _format(path).write
    refuse_empty(len(drive), path)
    check_rows(columns, file=path)
    with whole_file(path) as beside:
        writer(beside, columns, describe(drive))


def _format(path: Path) -> _Format:
    suffix = path.suffix.lower()
    if suffix not in FORMATS:
        raise DriveError("unknown kind of table", file=path, expected=" or ".join(FORMATS), got=repr(suffix))
    return FORMATS[suffix]


def _sensor(strip: Strip | None, table: Table, columns: Columns, path: Path) -> Strip:
    """The given strip, or the described one, held to the table's number of columns."""
    width = columns["depth_m"].shape[1]
    strip = strip or strip_from(table.members, width, path)
    if strip.columns != width:
        raise DriveError(
            "the strip does not fit the table",
            file=path,
            place="column depth_m",
            expected=f"{strip.columns} columns, as the strip has bearings",
            got=width,
        )
    return replace(strip, has_colour=strip.has_colour and "rgb" in columns)


def _stretch(strip: Strip, kind: str, path: Path) -> NDArray[np.float64]:
    """[w] what turns a depth of this kind into range along the bearing."""
    if kind not in DEPTH_KINDS:
        raise DriveError("unknown depth kind", file=path, expected=" or ".join(DEPTH_KINDS), got=kind)
    if kind == "range":
        return np.ones(strip.columns)
    cos = np.cos(strip.bearings_rad)
    sideways = np.flatnonzero(cos < 1e-9)  # cos(90 degrees) is 6e-17 in float64
    if sideways.size:
        raise DriveError(
            "depth along the axis says nothing at this bearing",
            file=path,
            place=f"column depth_m[{sideways[0]}]",
            expected="bearings within 90 degrees of straight ahead",
            got=f"{math.degrees(strip.bearings_rad[sideways[0]]):.6g} degrees",
        )
    return 1 / cos


def _largest_reading(table: Table, stretch: NDArray[np.float64]) -> float:
    """Metres, over the whole table; the default where nothing ever came back."""
    largest = 0.0
    for columns in table.batches(1024, ("depth_m",)):
        depth = (columns["depth_m"] * stretch).astype(np.float32)
        largest = max(largest, float(depth.max(where=np.isfinite(depth), initial=0.0)))
    return largest or Strip.max_range_m


def _drive(
    columns: Columns, strip: Strip, stretch: NDArray[np.float64], members: dict[str, Any], path: Path
) -> Drive:
    depth = (columns["depth_m"] * stretch).astype(np.float32)
    measured = (depth >= np.float32(strip.min_range_m)) & (depth <= np.float32(strip.max_range_m))
    return Drive(
        time_s=columns["time_s"],
        odometry=np.stack([columns[name] for name in ODOMETRY], axis=1),
        depth_m=np.where(measured, depth, np.float32(np.nan)),
        rgb=columns["rgb"].reshape(*depth.shape, 3) if strip.has_colour else None,
        reference=np.stack([columns[name] for name in REFERENCE], axis=1) if "x_m" in columns else None,
        strip=strip,
        name=str(members.get("name", path.stem)),
        site=str(members.get("site", "")),
    )


FORMATS = {
    ".parquet": _Format(open_parquet, write_parquet),
    ".csv": _Format(open_csv, write_csv),
}

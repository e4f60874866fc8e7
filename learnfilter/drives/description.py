"""What a drive table says of itself: one flat JSON object in the file's metadata.

Members (all optional but the bearings, and those too where the caller gives the strip):

    schema                                  1
    name, site                              text; evidence is grouped by site
    depth_kind                              "range" (along the bearing, the default) or "axis"
    first_bearing_deg, bearing_step_deg     evenly spaced columns, step negative when clockwise
    bearings_deg                            or a list, one a column
    min_range_m, max_range_m                outside of these a return does not exist
    blind                                   list of columns that never measure
    mount_x_m, mount_y_m, mount_heading_deg the sensor on the robot

A strip that is read and written again keeps its angles to 1e-12 rad, since files hold degrees.
"""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np

from learnfilter.core.errors import DriveError
from learnfilter.core.strip import Strip, even_strip
from learnfilter.drives.drive import Drive

SCHEMA = 1
DEPTH_KINDS = ("range", "axis")
BEARINGS = frozenset(("first_bearing_deg", "bearing_step_deg", "bearings_deg"))
SENSOR = frozenset(("min_range_m", "max_range_m", "blind", "mount_x_m", "mount_y_m", "mount_heading_deg"))
MEMBERS = BEARINGS | SENSOR | {"schema", "name", "site", "depth_kind"}


def describe(drive: Drive) -> dict[str, Any]:
    """The members for a drive about to be written; depths in memory are ranges already."""
    strip = drive.strip
    mount_x, mount_y, mount_heading = strip.mount
    return {
        "schema": SCHEMA,
        "name": drive.name,
        "site": drive.site,
        **_bearing_members(strip),
        "min_range_m": strip.min_range_m,
        "max_range_m": strip.max_range_m,
        "blind": list(strip.blind),
        "mount_x_m": mount_x,
        "mount_y_m": mount_y,
        "mount_heading_deg": _degrees(mount_heading),
    }


def _bearing_members(strip: Strip) -> dict[str, Any]:
    """First bearing and step where they say it all, else the list."""
    degrees = [_degrees(bearing) for bearing in strip.bearings_rad]
    exact = (degrees[-1] - degrees[0]) / max(1, len(degrees) - 1)
    for step in (round(exact, 9), exact):
        even = even_strip(degrees[0], step, len(degrees))
        if np.allclose(even, strip.bearings_rad, rtol=0, atol=1e-12):
            return {"first_bearing_deg": degrees[0], "bearing_step_deg": step}
    return {"bearings_deg": degrees}


def _degrees(angle_rad: float) -> float:
    """Degrees, without the dust of conversion where a short number means the same angle."""
    exact = math.degrees(angle_rad)
    short = round(exact, 9)
    return short if math.isclose(math.radians(short), angle_rad, rel_tol=1e-15) else exact


def parse_description(text: str | bytes, file: Path) -> dict[str, Any]:
    """Members from JSON text, unchecked; raises DriveError where it is no JSON object."""
    try:
        members = json.loads(text)
    except ValueError as error:
        raise DriveError(f"unreadable JSON ({error})", file=file, place="metadata") from error
    if not isinstance(members, dict):
        raise DriveError(
            "not a description", file=file, place="metadata", expected="a JSON object", got=members
        )
    return members


def check_description(members: dict[str, Any], file: Path) -> None:
    """Refuse what would be misread.

    Raises:
        DriveError: a schema newer than this reader, an unknown member, an unknown depth kind.
    """
    schema = members.get("schema", SCHEMA)
    if not isinstance(schema, int) or not 1 <= schema <= SCHEMA:
        raise DriveError(
            "the file's schema is not one this version reads",
            file=file,
            place="metadata, schema",
            expected=f"at most {SCHEMA}",
            got=schema,
        )
    unknown = sorted(set(members) - MEMBERS)
    if unknown:
        raise DriveError(
            "unknown member", file=file, place="metadata", expected=", ".join(sorted(MEMBERS)), got=unknown[0]
        )
    if members.get("depth_kind", "range") not in DEPTH_KINDS:
        raise DriveError(
            "unknown depth kind",
            file=file,
            place="metadata, depth_kind",
            expected=" or ".join(DEPTH_KINDS),
            got=members["depth_kind"],
        )


def strip_from(members: dict[str, Any], columns: int, file: Path) -> Strip:
    """The strip a file describes.

    Args:
        members: checked members.
        columns: number of depth columns the table has.
        file: for messages.

    Returns:
        A strip; `max_range_m` is infinite where the file does not say it.

    Raises:
        DriveError: bearings missing, given twice or of another number; a member out of range.
    """
    low = _number(members, "min_range_m", Strip.min_range_m, file)
    high = _number(members, "max_range_m", math.inf, file)
    if not 0 <= low < high:
        raise DriveError(
            "empty range", file=file, place="metadata", expected="0 <= min < max", got=(low, high)
        )
    blind = members.get("blind", [])
    if not isinstance(blind, list) or not all(type(b) is int and 0 <= b < columns for b in blind):
        raise DriveError(
            "not columns of this strip",
            file=file,
            place="metadata, blind",
            expected=f"a list of integers from 0 to {columns - 1}",
            got=blind,
        )
    mount_x, mount_y, mount_heading_deg = (
        _number(members, key, 0.0, file) for key in ("mount_x_m", "mount_y_m", "mount_heading_deg")
    )
    return Strip(
        bearings_rad=_bearings(members, columns, file),
        min_range_m=low,
        max_range_m=high,
        blind=tuple(blind),
        mount=(mount_x, mount_y, math.radians(mount_heading_deg)),
    )


def _bearings(members: dict[str, Any], columns: int, file: Path) -> tuple[float, ...]:
    said = BEARINGS & set(members)
    if said != {"bearings_deg"} and said != BEARINGS - {"bearings_deg"}:
        raise DriveError(
            "the strip's bearings are not said, or said twice",
            file=file,
            place="metadata",
            expected="first_bearing_deg and bearing_step_deg, or bearings_deg, or a strip in the settings",
            got=", ".join(sorted(said)) or "none of them",
        )
    if "bearings_deg" not in said:
        first = _number(members, "first_bearing_deg", 0.0, file)
        return even_strip(first, _number(members, "bearing_step_deg", 0.0, file), columns)
    bearings = members["bearings_deg"]
    if not isinstance(bearings, list) or len(bearings) != columns:
        raise DriveError(
            "bearings do not fit the table",
            file=file,
            place="metadata, bearings_deg",
            expected=f"a list of {columns} numbers, one a depth column",
            got=f"{len(bearings)} of them" if isinstance(bearings, list) else bearings,
        )
    numbered = {f"bearings_deg[{i}]": bearing for i, bearing in enumerate(bearings)}
    return tuple(math.radians(_number(numbered, key, 0.0, file)) for key in numbered)


def _number(members: dict[str, Any], key: str, default: float, file: Path) -> float:
    if key not in members:
        return default
    value = members[key]
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise DriveError(
            "not a number", file=file, place=f"metadata, {key}", expected="a finite number", got=value
        )
    return float(value)

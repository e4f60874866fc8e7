"""Read a plan from GeoJSON: our native form in metres, or WGS84 degrees.

The native form is a FeatureCollection with the top member
`"learnfilter": {"schema": 1, "units": "m", "name": ..., "finishes": {name: [r, g, b]}, "origin":
[longitude, latitude], "seed": [x, y]}`; all but `schema` and `units` may be left out.  Finishes are
sRGB in [0, 1].  A LineString is a wall unless `kind` says solid, door or window; a Polygon is a solid
thing unless `kind` says wall, window or unmapped; `"edges": false` makes it an area without surfaces.
A door's `state` is open, shut or unknown (default).  `finish` names a feature's surface.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from learnfilter.core.errors import PlanError
from learnfilter.plan.builder import PlanBuilder
from learnfilter.plan.document import Feature, is_number, load_document
from learnfilter.plan.floorplan import (
    DOOR,
    DOOR_STATES,
    KINDS,
    NO_FINISH,
    SHUT,
    SOLID,
    WALL,
    WINDOW,
    Finish,
    FloorPlan,
)
from learnfilter.plan.geographic import plan_from_degrees

MEMBER = "learnfilter"
SCHEMA = 1
UNMAPPED = -1
_LINE_KINDS = {name: number for number, name in enumerate(KINDS)}
_AREA_KINDS = {"solid": SOLID, "wall": WALL, "window": WINDOW, "unmapped": UNMAPPED}
_STATES = {name: number for number, name in enumerate(DOOR_STATES)}


def read_geojson(
    path: str | Path,
    *,
    level: str | int | None = None,
    door_width_m: float = 0.9,
    meanings: Mapping[str, str] | None = None,
) -> FloorPlan:
    """Read a plan, native or WGS84.

    Args:
        path: the file.
        level: WGS84 only: which level, where features carry several.
        door_width_m: WGS84 only: opening to cut where a door is only a point on a wall.
        meanings: WGS84 only: what more feature types mean, for example {"desk": "solid"};
            see `learnfilter.plan.geographic.MEANINGS`.

    Raises:
        PlanError: the file, or one feature of it, cannot be used.
    """
    document, features = load_document(path)
    if MEMBER in document:
        return _native(Path(path), document[MEMBER], features)
    return plan_from_degrees(Path(path), features, level=level, door_width_m=door_width_m, meanings=meanings)


def _native(path: Path, member: Any, features: list[Feature]) -> FloorPlan:
    place = f'"{MEMBER}"'
    if not isinstance(member, dict):
        raise PlanError("not an object", file=path, place=place, expected='{"schema": 1, ...}')
    schema = member.get("schema")
    if type(schema) is not int or schema < 1:
        raise PlanError("no schema", file=path, place=place, expected=f"schema 1 to {SCHEMA}", got=schema)
    if schema > SCHEMA:
        raise PlanError(
            "written by a newer learnfilter",
            file=path,
            place=place,
            expected=f"schema <= {SCHEMA}",
            got=schema,
        )
    if member.get("units") != "m":
        raise PlanError("unknown units", file=path, place=place, expected='"m"', got=member.get("units"))
    finishes = _finishes(path, member.get("finishes", {}))
    index = {finish.name: number for number, finish in enumerate(finishes)}
    builder = PlanBuilder()
    for feature in features:
        _add(builder, feature, index)
    name = member.get("name", path.stem)
    if not isinstance(name, str):
        raise PlanError("broken name", file=path, place=place, expected="text", got=name)
    return builder.build(
        path,
        finishes=finishes,
        seed=_pair(path, member, "seed"),
        origin=_pair(path, member, "origin"),
        name=name,
    )


def _add(builder: PlanBuilder, feature: Feature, finishes: dict[str, int]) -> None:
    finish = _choice(feature, "finish", finishes) if "finish" in feature.properties else NO_FINISH
    for shape, rings in feature.shapes():
        if shape == "LineString":
            kind = _choice(feature, "kind", _LINE_KINDS, "wall")
            state = _choice(feature, "state", _STATES, "unknown") if kind == DOOR else SHUT
            builder.line(rings[0], kind, feature.number, state, finish)
        elif shape == "Polygon":
            kind = _choice(feature, "kind", _AREA_KINDS, "solid")
            edges = feature.properties.get("edges", True)
            if not isinstance(edges, bool):
                raise feature.fault("unknown edges", expected="true or false", got=edges)
            if kind == UNMAPPED:
                builder.unmapped(rings)
            else:
                builder.solid(rings, kind if edges else None, feature.number, finish)
        else:
            raise feature.fault("a native plan has no points", expected="LineString or Polygon", got=shape)


def _choice(feature: Feature, key: str, table: Mapping[str, int], default: str | None = None) -> int:
    """The number a property's word stands for; an unknown word is the file's fault."""
    word = feature.properties.get(key, default)
    if not isinstance(word, str) or word not in table:
        raise feature.fault(
            f"unknown {key}", expected="one of " + (", ".join(table) or "none"), got=repr(word)
        )
    return table[word]


def _finishes(path: Path, value: Any) -> tuple[Finish, ...]:
    if not isinstance(value, dict):
        raise PlanError("not an object", file=path, place="finishes", expected="{name: [r, g, b]}")
    for name, srgb in value.items():
        if not _numbers(srgb, 3) or not all(0 <= part <= 1 for part in srgb):
            raise PlanError(
                "not a colour", file=path, place=f"finish {name}", expected="[r, g, b], sRGB 0 to 1", got=srgb
            )
    return tuple(Finish(name, (float(r), float(g), float(b))) for name, (r, g, b) in value.items())


def _pair(path: Path, member: dict[str, Any], key: str) -> tuple[float, float] | None:
    value = member.get(key)
    if value is None:
        return None
    if not _numbers(value, 2):
        raise PlanError("not a point", file=path, place=key, expected="two finite numbers", got=value)
    return float(value[0]), float(value[1])


def _numbers(value: Any, count: int) -> bool:
    return isinstance(value, list) and len(value) == count and all(map(is_number, value))

"""Make a plan from GeoJSON in WGS84 degrees: building drawings and indoor-tagged maps.

A drawing has polygons for the bodies of walls, with doors and windows filling the gaps (`type` or
`kind` says which).  A tagged map has rooms (`indoor`) that share their walls, and doors that are points
on them.  The frame's (0, 0) is the middle of all features that mean something, on every level, so that
the levels of one building share a frame; x points east, y north.
"""

from __future__ import annotations

import logging
import re
from collections import Counter
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely.geometry import Polygon

from learnfilter.core.errors import PlanError
from learnfilter.plan.builder import PlanBuilder
from learnfilter.plan.document import Feature, Rings
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, SOLID, UNKNOWN, WALL, WINDOW, FloorPlan
from learnfilter.plan.outlines import DoorPoint, RoomEdges

# What the words of `type` or `kind` mean.  Lifts and stairs are unmapped: what is behind them changes.
# An outline of the building is ignored: it is often the slab's, metres outside the walls.
DRAWN = {
    "wall": "wall",
    "column": "solid",
    "inaccessible_space": "solid",
    "door": "door",
    "window": "window",
    "stairs": "unmapped",
    "escalator": "unmapped",
    "elevator": "unmapped",
    "building_outline": "ignored",
    "room": "ignored",
    "corridor": "ignored",
    "bathroom": "ignored",
    "area": "ignored",
}
# What the words of `indoor` mean: there the rooms are all the walls one gets.
TAGGED = {
    **DRAWN,
    "room": "room",
    "bathroom": "room",
    "corridor": "corridor",
    "area": "area",
    "level": "ignored",
}
MEANINGS = ("wall", "solid", "door", "window", "unmapped", "room", "corridor", "area", "ignored")
_LINES = {"wall": WALL, "solid": SOLID, "door": DOOR, "window": WINDOW}

_WGS84_RADIUS_M, _WGS84_FLATTENING = 6378137.0, 1 / 298.257223563
# A feature, its meaning, and one shape of it.
_Part = tuple[Feature, str, str, Rings]
_log = logging.getLogger(__name__)


def metres_per_radian(latitude_deg: float) -> tuple[float, float]:
    """Metres east per radian of longitude and north per radian of latitude, on the WGS84 ellipsoid.

    N(lat) cos(lat) and M(lat) of the prime vertical and the meridian (NIMA TR8350.2, 2000).
    """
    squared = _WGS84_FLATTENING * (2 - _WGS84_FLATTENING)
    latitude = np.radians(latitude_deg)
    bend = 1 - squared * np.sin(latitude) ** 2
    across = _WGS84_RADIUS_M / np.sqrt(bend)
    return float(across * np.cos(latitude)), float(_WGS84_RADIUS_M * (1 - squared) / bend**1.5)


def plan_from_degrees(
    path: Path,
    features: list[Feature],
    *,
    level: str | int | None,
    door_width_m: float,
    meanings: Mapping[str, str] | None,
) -> FloorPlan:
    """Project and interpret features; arguments as `read_geojson`.

    Raises:
        PlanError: an option or degrees out of range, a level to choose, or nothing that makes a wall.
    """
    if not door_width_m > 0:
        raise PlanError("doors without width", file=path, expected="door_width_m > 0", got=door_width_m)
    parts = _meant(path, features, meanings or {})
    if not parts:
        raise PlanError("no feature means a wall", file=path, expected=f"type or indoor: {', '.join(DRAWN)}")
    origin = _middle(parts)
    scale = np.radians(metres_per_radian(origin[1]))
    chosen = _chosen_level(path, (feature for feature, *_ in parts), level)
    builder, edges = PlanBuilder(), RoomEdges()
    for feature, meaning, shape, rings in parts:
        if chosen is None or chosen in _levels(feature, default=chosen):
            metres = tuple((ring - origin) * scale for ring in rings)
            _add(builder, edges, feature, meaning, shape, metres)
    edges.build(builder, door_width_m)
    return builder.build(path, origin=origin, name=path.stem)


def _meant(path: Path, features: list[Feature], extra: Mapping[str, str]) -> list[_Part]:
    """Features that mean something, part by part; the rest is named in the log."""
    for word, wanted in extra.items():
        if wanted not in MEANINGS:
            raise PlanError(
                "no such meaning", file=path, place=word, expected=", ".join(MEANINGS), got=wanted
            )
    parts: list[_Part] = []
    unknown = Counter[str]()
    for feature in features:
        properties = feature.properties
        tagged = properties.get("indoor")
        word = str(tagged or properties.get("type") or properties.get("kind") or "")
        if not word and ("door" in properties or "entrance" in properties):
            word = "door"
        if not word:
            continue
        meaning = {**(TAGGED if tagged else DRAWN), **extra}.get(word)
        if meaning is None:
            unknown[word] += 1
        elif meaning != "ignored":
            parts.extend((feature, meaning, *part) for part in feature.shapes())
    if unknown:
        _log.warning("%s: ignored features of unknown type: %s", path, dict(unknown))
    return parts


def _middle(parts: list[_Part]) -> tuple[float, float]:
    for feature, _, _, rings in parts:
        if any((np.abs(ring) > (180, 90)).any() for ring in rings):
            raise feature.fault(
                "not degrees (a plan in metres says so in its learnfilter member)",
                expected="longitude -180 to 180, latitude -90 to 90",
            )
    positions = np.vstack([ring for *_, rings in parts for ring in rings])
    longitude, latitude = (positions.min(axis=0) + positions.max(axis=0)) / 2
    return float(longitude), float(latitude)


def _levels(feature: Feature, default: str | None = None) -> set[str]:
    """Levels a feature is on: `0;1` is a list and `-1-2` a range; without any, it is on every level."""
    level = feature.properties.get("level", default)
    text = "" if level is None else str(level)
    levels: set[str] = set()
    for item in text.replace(" ", "").split(";"):
        if span := re.fullmatch(r"(-?\d{1,3})-(-?\d{1,3})", item):
            levels.update(str(number) for number in range(int(span[1]), int(span[2]) + 1))
        elif item:
            levels.add(item)
    return levels


def _chosen_level(path: Path, features: Iterable[Feature], level: str | int | None) -> str | None:
    known = sorted({name for feature in features for name in _levels(feature)})
    if level is None and len(known) > 1:
        raise PlanError("the plan has several levels", file=path, place="level", expected=" or ".join(known))
    if level is not None and str(level) not in known:
        raise PlanError(
            "no such level",
            file=path,
            place="level",
            expected=" or ".join(known) or "none, as the plan has no levels",
            got=level,
        )
    return str(level) if level is not None else (known[0] if known else None)


def _add(
    builder: PlanBuilder, edges: RoomEdges, feature: Feature, meaning: str, shape: str, rings: Rings
) -> None:
    """Hand one part, in metres, to where its meaning puts it."""
    if shape == "Point":
        if meaning == "door":
            state = OPEN if feature.properties.get("door") == "no" else UNKNOWN
            edges.door(DoorPoint(rings[0][0], state, feature.number))
    elif shape == "LineString":
        if meaning in ("room", "wall"):
            edges.outline("room", rings[0], feature.number)
        elif meaning in _LINES:
            builder.line(rings[0], _LINES[meaning], feature.number, UNKNOWN if meaning == "door" else SHUT)
    elif meaning in ("room", "corridor", "area"):
        for ring in rings:
            edges.outline(meaning, ring, feature.number)
    elif meaning == "unmapped":
        builder.unmapped(rings)
    elif meaning == "door":
        builder.line(long_axis(feature, rings[0]), DOOR, feature.number, UNKNOWN)
    else:
        builder.solid(rings, _LINES[meaning], feature.number)


def long_axis(feature: Feature, ring: NDArray[np.float64]) -> NDArray[np.float64]:
    """The line [2 2] along the middle of a bar, whose outline is `ring` [k 2].

    Raises:
        PlanError: the ring has no area.
    """
    bar: Any = shapely.oriented_envelope(Polygon(ring))
    if bar.geom_type != "Polygon" or bar.area == 0:
        raise feature.fault("an opening without area", expected="a bar that fills the gap in a wall")
    corners = np.asarray(bar.exterior.coords)[:4]
    sides = np.hypot(*(np.roll(corners, -1, axis=0) - corners).T)
    first = 0 if sides[0] < sides[1] else 1  # the side between corners `first` and `first + 1` is short
    corners = np.roll(corners, -first, axis=0)
    return np.array([corners[:2].mean(axis=0), corners[2:].mean(axis=0)])

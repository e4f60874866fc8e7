"""A GeoJSON file (RFC 7946) as checked features; nothing here knows what a feature means.

Every fault is a PlanError that names the file and the feature, counted from 0 in file order.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import PlanError
from learnfilter.plan.floorplan import closed

Rings = tuple[NDArray[np.float64], ...]
# Neither metres nor degrees come near it; beyond, products lose the centimetres.
_TOO_LARGE = 1e9
# The single types, and which of them a collected type splits into.
_SINGLES = ("Point", "LineString", "Polygon")
_SPLIT = {"MultiPoint": "Point", "MultiLineString": "LineString", "MultiPolygon": "Polygon"}


@dataclass(frozen=True)
class Feature:
    """One feature, its geometry not yet read.

    Attributes:
        number: place in the file, from 0.
        place: what a message calls it.
        properties: as in the file; empty where the file has null.
        geometry: as in the file.
        file: where it came from.
    """

    number: int
    place: str
    properties: dict[str, Any]
    geometry: Any
    file: Path

    def fault(self, message: str, *, expected: str | None = None, got: object = None) -> PlanError:
        """The error to raise about this feature."""
        return PlanError(message, file=self.file, place=self.place, expected=expected, got=got)

    def shapes(self) -> Iterator[tuple[str, Rings]]:
        """Each part as (Point, LineString or Polygon; its [k 2] rows), open rings closed.

        Raises:
            PlanError: a type with no meaning on a plan, or coordinates that are not numbers.
        """
        kind = self.geometry.get("type") if isinstance(self.geometry, dict) else None
        if not isinstance(kind, str) or kind not in (*_SINGLES, *_SPLIT):
            known = ", ".join([*_SINGLES, *_SPLIT])
            raise self.fault("this geometry cannot be read", expected=known, got=kind)
        coordinates = self.geometry.get("coordinates")
        single = _SPLIT.get(kind, kind)
        for part in self._items(coordinates) if kind in _SPLIT else [coordinates]:
            yield single, self._rings(single, part)

    def _rings(self, kind: str, coordinates: Any) -> Rings:
        if kind == "Point":
            return (self._positions([coordinates], least=1),)
        if kind == "LineString":
            return (self._positions(coordinates, least=2),)
        return tuple(closed(self._positions(ring, least=3)) for ring in self._items(coordinates))

    def _items(self, value: Any) -> list[Any]:
        if not isinstance(value, list) or not value:
            raise self.fault("coordinates are missing", expected="a filled list", got=_short(value))
        return value

    def _positions(self, value: Any, least: int) -> NDArray[np.float64]:
        positions = self._items(value)
        for position in positions:
            if not isinstance(position, list) or len(position) < 2 or not all(map(is_number, position[:2])):
                raise self.fault("a position is broken", expected="two finite numbers", got=_short(position))
        rows = np.array([position[:2] for position in positions], dtype=np.float64)
        if len(np.unique(rows, axis=0)) < least:
            raise self.fault("too few positions", expected=f"at least {least} that differ", got=len(rows))
        return rows


def is_number(value: Any) -> bool:
    """Whether a JSON value is a number a plan can hold (true, NaN and 1e999 are not)."""
    return type(value) in (int, float) and abs(value) < _TOO_LARGE


def load_document(path: str | Path) -> tuple[dict[str, Any], list[Feature]]:
    """Read a FeatureCollection.

    Returns:
        The document, and its features in file order.

    Raises:
        PlanError: no such file, not UTF-8, not JSON, or not a FeatureCollection.
    """
    path = Path(path)
    try:
        document = json.loads(path.read_bytes().decode("utf-8-sig"), parse_constant=_refuse)
    except OSError as error:
        raise PlanError("the plan cannot be opened", file=path, got=error.strerror) from error
    except UnicodeDecodeError as error:
        raise PlanError("not UTF-8 text", file=path, place=f"byte {error.start}") from error
    except json.JSONDecodeError as error:
        raise PlanError("not JSON", file=path, place=f"line {error.lineno}", got=error.msg) from error
    except (ValueError, RecursionError) as error:
        raise PlanError("not JSON", file=path, got=str(error)) from error
    kind = document.get("type") if isinstance(document, dict) else type(document).__name__
    if kind != "FeatureCollection":
        raise PlanError("not a plan", file=path, expected="a GeoJSON FeatureCollection", got=kind)
    features = document.get("features")
    if not isinstance(features, list):
        raise PlanError("no features", file=path, place="features", expected="a list", got=_short(features))
    return document, [_feature(path, number, value) for number, value in enumerate(features)]


def _feature(path: Path, number: int, value: Any) -> Feature:
    place = f"feature {number}"
    properties = value.get("properties") or {} if isinstance(value, dict) else None
    if not isinstance(properties, dict) or value.get("type") != "Feature":
        raise PlanError("not a feature", file=path, place=place, expected="a GeoJSON Feature")
    name = value.get("id", properties.get("id"))
    place = place if name is None else f"{place} (id {name})"
    return Feature(number, place, properties, value.get("geometry"), path)


def _refuse(constant: str) -> None:
    raise ValueError(f"{constant} is no JSON number")


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."

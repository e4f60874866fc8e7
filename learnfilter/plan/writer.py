"""Write a plan as native GeoJSON: one feature a line, every number whole, so that reading it gives it back.

`feature` numbers alone may change: they count features of the file a plan came from.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.files import whole_file
from learnfilter.plan.floorplan import DOOR, DOOR_STATES, KINDS, FloorPlan
from learnfilter.plan.geojson import MEMBER, SCHEMA


def write_plan(plan: FloorPlan, path: str | Path) -> None:
    """Write a plan in the native form, whole or not at all.

    A closed run of edges that bounds the next solid becomes one Polygon, other runs become LineStrings,
    solids that no run bounds become Polygons without edges.
    """
    member: dict[str, Any] = {"schema": SCHEMA, "units": plan.units, "name": plan.name}
    member["finishes"] = {finish.name: list(finish.srgb) for finish in plan.finishes}
    member |= {key: list(value) for key in ("origin", "seed") if (value := getattr(plan, key)) is not None}
    features = ",\n".join(_json(feature) for feature in _features(plan))
    text = f'{{"type": "FeatureCollection",\n"{MEMBER}": {_json(member)},\n"features": [\n{features}\n]}}\n'
    with whole_file(path) as beside:
        beside.write_text(text, encoding="utf-8")


def _features(plan: FloorPlan) -> Iterator[dict[str, Any]]:
    places: dict[bytes, list[int]] = {}
    for place, solid in enumerate(plan.solids):
        places.setdefault(solid.tobytes(), []).append(place)
    done = 0  # solids keep their order
    for run in _runs(plan):
        first = run[0]
        line = np.vstack([plan.segments[run, :2], plan.segments[run[-1:], 2:]])
        kind = int(plan.kind[first])
        properties: dict[str, Any] = {"kind": KINDS[kind]}
        if kind == DOOR:
            properties["state"] = DOOR_STATES[plan.state[first]]
        if plan.finish[first] >= 0:
            properties["finish"] = plan.finishes[plan.finish[first]].name
        bounded = next((place for place in places.get(line.tobytes(), ()) if place >= done), None)
        if kind == DOOR or bounded is None:
            yield _feature("LineString", line, properties)
            continue
        for solid in plan.solids[done:bounded]:
            yield _feature("Polygon", solid, {"kind": "solid", "edges": False})
        yield _feature("Polygon", line, properties)
        done = bounded + 1
    for solid in plan.solids[done:]:
        yield _feature("Polygon", solid, {"kind": "solid", "edges": False})
    for outline in plan.unmapped:
        yield _feature("Polygon", outline, {"kind": "unmapped"})


def _runs(plan: FloorPlan) -> list[NDArray[np.int64]]:
    """Segment numbers of each polyline: neighbours that touch end to end and are labelled alike.

    A run ends where it comes back to its start, so that two rings never melt into one.
    """
    labels = np.stack([plan.kind, plan.state, plan.finish, plan.feature], axis=1)
    runs: list[list[int]] = []
    for number, row in enumerate(plan.segments):
        last = runs[-1] if runs else None
        if (
            last is not None
            and np.array_equal(labels[number], labels[last[-1]])
            and np.array_equal(row[:2], plan.segments[last[-1], 2:])
            and not np.array_equal(row[:2], plan.segments[last[0], :2])
        ):
            last.append(number)
        else:
            runs.append([number])
    return [np.array(run) for run in runs]


def _feature(shape: str, line: NDArray[np.float64], properties: dict[str, Any]) -> dict[str, Any]:
    coordinates = line.tolist() if shape == "LineString" else [line.tolist()]
    geometry = {"type": shape, "coordinates": coordinates}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def _json(value: Any) -> str:
    return json.dumps(value, allow_nan=False, ensure_ascii=False)

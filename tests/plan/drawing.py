"""Small native documents for the tests of plans."""

import json
from pathlib import Path

MEMBER = {"schema": 1, "units": "m"}
ROOM = [[0, 0], [6, 0], [6, 5], [0, 5], [0, 0]]


def shape(geometry_type: str, coordinates, **properties) -> dict:
    """One GeoJSON feature."""
    geometry = {"type": geometry_type, "coordinates": coordinates}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def line(*points, **properties) -> dict:
    """A LineString feature."""
    return shape("LineString", [list(point) for point in points], **properties)


def save(path: Path, *features, member=MEMBER) -> Path:
    """Write a FeatureCollection; `member=None` leaves the native member out."""
    document = {"type": "FeatureCollection", "features": list(features)}
    if member is not None:
        document["learnfilter"] = member
    path.write_text(json.dumps(document), encoding="utf-8")
    return path

"""The one table from file suffixes to plan readers."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from pathlib import Path
from typing import Any

from learnfilter.core.errors import PlanError
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.plan.geojson import read_geojson
from learnfilter.plan.picture import read_picture

READERS: dict[str, Callable[..., FloorPlan]] = {
    ".geojson": read_geojson,
    ".json": read_geojson,
    ".png": read_picture,
}


def read_plan(path: str | Path, **options: Any) -> FloorPlan:
    """Read a floor plan of any known format.

    Args:
        path: the file; its suffix chooses the reader.
        options: of that reader, for example `level` for a map of several levels.

    Raises:
        PlanError: unknown suffix or option, or the file cannot be used.
    """
    path = Path(path)
    reader = READERS.get(path.suffix.lower())
    if reader is None:
        raise PlanError(
            "unknown format", file=path, expected=" or ".join(READERS), got=path.suffix or "no suffix"
        )
    known = [name for name in inspect.signature(reader).parameters if name != "path"]
    unknown = [name for name in options if name not in known]
    if unknown:
        raise PlanError(
            "unknown option", file=path, expected=", ".join(known) or "none", got=", ".join(unknown)
        )
    return reader(path, **options)

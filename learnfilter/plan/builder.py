"""Collect lines and areas feature by feature, then make them a FloorPlan: what every reader ends in."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely import GeometryType
from shapely.geometry import Polygon, box

from learnfilter.core.errors import PlanError
from learnfilter.plan.floorplan import NO_FINISH, SHUT, FloorPlan

# Shorter edges have no direction worth keeping; far below any drawing's precision.
ZERO_LENGTH_M = 1e-9


class PlanBuilder:
    """Grows a plan; `build` may be called once everything is in."""

    def __init__(self) -> None:
        self._rows: list[NDArray[np.float64]] = []
        self._labels: list[NDArray[np.int64]] = []
        self._solids: list[NDArray[np.float64]] = []
        self._unmapped: list[NDArray[np.float64]] = []

    def line(
        self, xy: NDArray[np.float64], kind: int, feature: int, state: int = SHUT, finish: int = NO_FINISH
    ) -> None:
        """Add a polyline ([k 2] metres), edge by edge; edges without length are dropped."""
        rows = np.hstack([xy[:-1], xy[1:]])
        rows = rows[np.hypot(rows[:, 2] - rows[:, 0], rows[:, 3] - rows[:, 1]) > ZERO_LENGTH_M]
        self._rows.append(rows)
        self._labels.append(np.tile([kind, state, finish, feature], (len(rows), 1)))

    def solid(
        self, rings: Sequence[NDArray[np.float64]], kind: int | None, feature: int, finish: int = NO_FINISH
    ) -> None:
        """Nobody can stand between the outer ring and the holes ([k 2] each, metres).

        The rings become surfaces of that kind; with None the area has no surface of its own.
        """
        self._solids.extend(without_holes(rings))
        if kind is not None:
            for ring in rings:
                self.line(ring, kind, feature, finish=finish)

    def unmapped(self, rings: Sequence[NDArray[np.float64]]) -> None:
        """The plan knows nothing between the outer ring and the holes ([k 2] each, metres)."""
        self._unmapped.extend(without_holes(rings))

    def build(self, file: str | Path, **members: Any) -> FloorPlan:
        """Make the plan; `members` are FloorPlan's finishes, seed, origin and name.

        Raises:
            PlanError: there is not one wall.
        """
        if not any(len(rows) for rows in self._rows):
            raise PlanError("the plan has no walls", file=file, expected="at least one wall or solid thing")
        kind, state, finish, feature = np.concatenate(self._labels).T
        return FloorPlan(
            segments=np.concatenate(self._rows),
            kind=kind,
            state=state,
            finish=finish,
            feature=feature,
            solids=tuple(self._solids),
            unmapped=tuple(self._unmapped),
            **members,
        )


def without_holes(rings: Sequence[NDArray[np.float64]]) -> list[NDArray[np.float64]]:
    """Closed outlines that cover the area between an outer ring and its holes, each without a hole.

    A ring that crosses itself is mended by the even-odd rule.
    """
    polygon = Polygon(rings[0], rings[1:])
    if len(rings) == 1 and polygon.is_valid:
        return [np.asarray(rings[0])]
    pieces: list[NDArray[np.float64]] = []
    pending = _polygons(shapely.make_valid(polygon))
    while len(pending):
        holed = shapely.get_num_interior_rings(pending) > 0
        pieces += [np.asarray(piece.exterior.coords) for piece in pending[~holed]]
        halves = [half for piece in pending[holed] for half in _halves(piece)]
        pending = _polygons(shapely.intersection(np.repeat(pending[holed], 2), halves))
    return pieces


def _halves(piece: Polygon) -> tuple[Polygon, Polygon]:
    """Two boxes over a piece that share a side through its middle hole, across its longer extent.

    The middle one, since a scanned floor has holes by the thousand: cut off one by one they cost their
    number squared.
    """
    left, bottom, right, top = piece.bounds
    centres = shapely.get_coordinates(shapely.centroid(piece.interiors))
    x, y = np.sort(centres, axis=0)[len(centres) // 2]
    if right - left > top - bottom:
        return box(left, bottom, x, top), box(x, bottom, right, top)
    return box(left, bottom, right, y), box(left, y, right, top)


def _polygons(shapes: shapely.Geometry | NDArray[np.object_]) -> NDArray[np.object_]:
    parts = shapely.get_parts(shapes)
    return parts[(shapely.get_type_id(parts) == GeometryType.POLYGON) & (shapely.area(parts) > 0)]

"""Families of invented sites."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple, TypeVar

import numpy as np

from learnfilter.core.errors import ConfigError
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.sim.families import aisles, doors, hall, offices, partitions, pods, racks, wings
from learnfilter.sim.families.sketch import Sketch
from learnfilter.sim.finishes import PALETTES

__all__ = ["FAMILIES", "Family", "fold_of", "make_plan"]

T = TypeVar("T")


class Family(NamedTuple):
    """How sites of a family are drawn, and what they have in common.

    Attributes:
        draw: draws on a sketch a site so many decimetres wide and deep.
        fold: the plan is unchanged by turns of 2 pi / fold about the middle of its bounds.
    """

    draw: Callable[[Sketch, int, int], None]
    fold: int = 1


FAMILIES = {
    "offices": Family(offices.draw),
    "aisles": Family(aisles.draw),
    "hall": Family(hall.draw),
    "partitions": Family(partitions.draw),
    "doors": Family(doors.draw),
    "racks": Family(racks.draw),
    "wings": Family(wings.draw, fold=2),
    "pods": Family(pods.draw),
}
# Stands in for any other under conditions with an unseen family: the only one with slanted walls.
UNSEEN_FAMILY = "pods"
SIZES_M = (8.0, 40.0)


def fold_of(family: str) -> int:
    """How many poses of a site of the family look exactly alike, see `Family.fold`.

    Raises:
        ConfigError: unknown family.
    """
    return _known("family", family, FAMILIES).fold


def make_plan(
    family: str,
    rng: np.random.Generator,
    width_m: float = 12.0,
    depth_m: float = 12.0,
    *,
    palette: str = "usual",
    with_finishes: bool = True,
    name: str = "",
) -> FloorPlan:
    """Invent a site.

    Args:
        family: a name in FAMILIES.
        rng: draws the layout; the same draws give the same layout in any palette.
        width_m, depth_m: outer size, rounded to 0.1 m.
        palette: a name in `finishes.PALETTES`.
        with_finishes: whether the plan says how surfaces look.
        name: of the plan, the family's if empty.

    Raises:
        ConfigError: unknown family or palette, or a size outside 8 to 40 m.
    """
    draw = _known("family", family, FAMILIES).draw
    sketch = Sketch(rng, _known("palette", palette, PALETTES))
    low, high = SIZES_M
    if not (low <= width_m <= high and low <= depth_m <= high):
        raise ConfigError(
            "size out of range",
            place="site.width_m, site.depth_m",
            expected="8 to 40 m",
            got=f"{width_m} x {depth_m}",
        )
    draw(sketch, round(10 * width_m), round(10 * depth_m))
    return sketch.plan(name or family, with_finishes)


def _known(key: str, name: str, table: Mapping[str, T]) -> T:
    """What a table holds under a name of the user's."""
    if name not in table:
        raise ConfigError(f"unknown {key}", place=f"site.{key}", expected=", ".join(table), got=name)
    return table[name]

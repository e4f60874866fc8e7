"""Families of invented sites."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from learnfilter.core.errors import ConfigError
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.sim.families import aisles, hall, offices, partitions
from learnfilter.sim.families.sketch import Sketch
from learnfilter.sim.finishes import PALETTES

__all__ = ["FAMILIES", "make_plan"]

# Name -> function that draws on a sketch a site so many decimetres wide and deep.
FAMILIES: dict[str, Callable[[Sketch, int, int], None]] = {
    "offices": offices.draw,
    "aisles": aisles.draw,
    "hall": hall.draw,
    "partitions": partitions.draw,
}
SIZES_M = (8.0, 40.0)


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
    for key, value, known in (("family", family, FAMILIES), ("palette", palette, PALETTES)):
        if value not in known:
            raise ConfigError(f"unknown {key}", place=f"site.{key}", expected=", ".join(known), got=value)
    low, high = SIZES_M
    if not (low <= width_m <= high and low <= depth_m <= high):
        raise ConfigError(
            "size out of range",
            place="site.width_m, site.depth_m",
            expected="8 to 40 m",
            got=f"{width_m} x {depth_m}",
        )
    sketch = Sketch(rng, PALETTES[palette])
    FAMILIES[family](sketch, round(10 * width_m), round(10 * depth_m))
    return sketch.plan(name or family, with_finishes)

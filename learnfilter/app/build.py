"""From settings to the values the other rooms work with."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from learnfilter.app.config import SiteConfig, StripConfig, hold
from learnfilter.app.mover_config import MoverConfig, PracticeConfig
from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import Strip, even_strip
from learnfilter.plan import FloorPlan, read_plan
from learnfilter.runtime.moves import Footprint, Motion, check_motions
from learnfilter.sim import FAMILIES
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.families import SIZES_M

# Settings of a site that its file's reader takes.
FILE_OPTIONS = ("level", "metres_per_pixel", "wall_grey", "free_grey", "left_m", "bottom_m")


def build_strip(settings: StripConfig) -> Strip:
    """The sensor that `strip` describes."""
    if settings.bearings_deg is None:
        bearings = even_strip(settings.first_bearing_deg, settings.bearing_step_deg, settings.columns)
    else:
        bearings = tuple(math.radians(bearing) for bearing in settings.bearings_deg)
    return Strip(
        bearings_rad=bearings,
        min_range_m=settings.min_range_m,
        max_range_m=settings.max_range_m,
        has_colour=settings.colour,
        blind=tuple(settings.blind),
        mount=(settings.mount_x_m, settings.mount_y_m, math.radians(settings.mount_heading_deg)),
    )


def build_motions(settings: MoverConfig) -> tuple[Motion, ...]:
    """The motions that movers choose among.

    Raises:
        ConfigError: a blocked robot could not turn away.
    """
    motions = tuple(Motion(move.distance_m, 0.0, math.radians(move.turn_deg)) for move in settings.moves)
    check_motions(motions)
    return motions


def build_footprint(settings: MoverConfig, strip: Strip, radius_m: float) -> Footprint:
    """The robot that movers keep clear of what its strip shows."""
    return Footprint(radius_m, strip.mount, settings.clearance_m, settings.skirt_m)


def build_conditions(settings: Any) -> Conditions:
    """How site, light, sensor and robot differ from the plan, from a ConditionConfig."""
    return Conditions(**asdict(settings))


def build_plan(settings: SiteConfig) -> FloorPlan:
    """The plan that `site.file` names."""
    if settings.file is None:
        raise ConfigError("a floor plan is needed", place="site.file", expected="site.file=PATH")
    options = {key: getattr(settings, key) for key in FILE_OPTIONS}
    return read_plan(settings.file, **{key: value for key, value in options.items() if value is not None})


def check_invented(settings: SiteConfig | PracticeConfig, place: str = "site") -> None:
    """Refuse sites that nobody can invent, before a run folder is made for them.

    Args:
        settings: of the sites.
        place: whose settings they are.

    Raises:
        ConfigError: no families, unknown ones, or a size out of range.
    """
    known = bool(settings.families) and set(settings.families) <= FAMILIES.keys()
    hold(f"{place}.families", known, f"some of {', '.join(FAMILIES)}", settings.families)
    low, high = SIZES_M
    for key, size in (("width_m", settings.width_m), ("depth_m", settings.depth_m)):
        hold(f"{place}.{key}", low <= size <= high, f"{low:g} to {high:g} metres", size)

"""Typed settings: what a setting may be.  Defaults and their comments are in configs/.

The classes are not frozen: the composing library refuses every value for a frozen one.  Ranges are
checked when a composed configuration becomes objects, and messages name the whole key.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, make_dataclass
from pathlib import Path
from typing import Any, TypeVar, get_type_hints

from omegaconf import DictConfig, OmegaConf
from omegaconf.errors import MissingMandatoryValue, OmegaConfBaseException

from learnfilter.core.errors import ConfigError
from learnfilter.sim.conditions import Conditions

T = TypeVar("T")


def hold(key: str, good: bool, expected: str, got: object) -> None:
    """Raise ConfigError naming the setting `key` unless `good`."""
    if not good:
        raise ConfigError("out of range", place=key, expected=expected, got=got)


@dataclass
class Common:
    """Settings every verb has."""

    name: str | None
    runs: str
    seed: int
    threads: int | None

    def __post_init__(self) -> None:
        hold("name", self.name is None or self.name == Path(self.name).name, "no folders in it", self.name)
        hold("seed", self.seed >= 0, "a whole number not below 0", self.seed)
        hold("threads", self.threads is None or self.threads >= 1, "null or at least 1", self.threads)


@dataclass
class SiteConfig:
    """A plan in a file (`file`), or invented sites (`families`); the keys from `level` on are the file's."""

    file: str | None
    level: str | None
    metres_per_pixel: float | None
    wall_grey: list[int] | None
    free_grey: list[int] | None
    left_m: float | None
    bottom_m: float | None
    families: list[str]
    width_m: float
    depth_m: float


@dataclass
class StripConfig:
    """The sensor; `bearings_deg` replaces even bearings."""

    columns: int
    first_bearing_deg: float
    bearing_step_deg: float
    bearings_deg: list[float] | None
    min_range_m: float
    max_range_m: float
    colour: bool
    blind: list[int]
    depth_kind: str
    mount_x_m: float
    mount_y_m: float
    mount_heading_deg: float

    def __post_init__(self) -> None:
        hold("strip.columns", self.columns >= 1, "at least 1", self.columns)
        bearings = self.bearings_deg
        fits = bearings is None or len(bearings) == self.columns
        hold("strip.bearings_deg", fits, f"null or one bearing for each of {self.columns} columns", bearings)
        hold("strip.bearing_step_deg", self.bearing_step_deg != 0, "not 0", self.bearing_step_deg)
        hold("strip.min_range_m", self.min_range_m >= 0, "not below 0", self.min_range_m)
        hold("strip.max_range_m", self.max_range_m > self.min_range_m, "above min_range_m", self.max_range_m)
        inside = all(0 <= column < self.columns for column in self.blind)
        hold("strip.blind", inside, f"columns 0 to {self.columns - 1}", self.blind)
        hold("strip.depth_kind", self.depth_kind in ("range", "axis"), "range or axis", self.depth_kind)


@dataclass
class GridConfig:
    """The lattice of poses and how the plan is rendered on it."""

    cell_m: float
    headings: int
    bearings_per_heading: int
    column_step: int
    robot_radius_m: float
    windows: str

    def __post_init__(self) -> None:
        hold("grid.cell_m", 0.02 <= self.cell_m <= 2, "0.02 to 2 metres", self.cell_m)
        hold("grid.headings", self.headings >= 4, "at least 4", self.headings)
        hold(
            "grid.bearings_per_heading",
            self.bearings_per_heading >= 1,
            "at least 1",
            self.bearings_per_heading,
        )
        hold("grid.column_step", self.column_step >= 1, "at least 1", self.column_step)
        hold("grid.robot_radius_m", self.robot_radius_m >= 0, "not below 0", self.robot_radius_m)
        hold(
            "grid.windows",
            self.windows in ("unsure", "solid", "clear"),
            "unsure, solid or clear",
            self.windows,
        )


@dataclass
class MotionConfig:
    """Spread of odometry, as standard deviations, and when a strip is weighed."""

    turn_from_turn: float
    turn_from_travel: float
    travel_from_travel: float
    travel_from_turn: float
    weigh_after_m: float
    weigh_after_rad: float
    floor: float

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            hold(f"motion.{field.name}", value >= 0, "not below 0", value)
        hold("motion.floor", self.floor < 1, "a probability below 1", self.floor)


# The composing library needs a class that is not frozen; Conditions checks its own ranges.
ConditionConfig: Any = make_dataclass("ConditionConfig", get_type_hints(Conditions).items())


def typed(composed: DictConfig, schema: type[T]) -> T:
    """Turn a composed configuration into objects of `schema`.

    Raises:
        ConfigError: a key the schema does not have, a value of the wrong type, out of range or missing.
    """
    try:
        settings = OmegaConf.to_object(OmegaConf.merge(OmegaConf.structured(schema), composed))
    except MissingMandatoryValue as error:
        raise ConfigError(
            "a value is needed", place=error.full_key, expected=f"{error.full_key}=VALUE"
        ) from error
    except OmegaConfBaseException as error:
        raise ConfigError(str(error).splitlines()[0], place=error.full_key) from error
    assert isinstance(settings, schema)
    return settings


def flat(tree: Any, prefix: str = "") -> dict[str, Any]:
    """Nested dictionaries as one: whole key to value, in order."""
    if not isinstance(tree, dict):
        return {prefix: tree}
    return {
        key: leaf
        for name, branch in tree.items()
        for key, leaf in flat(branch, f"{prefix}.{name}".lstrip(".")).items()
    }

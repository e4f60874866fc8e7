"""Typed settings of each verb; the groups they are made of are in config.py and recipes.py."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from learnfilter.app.config import (
    Common,
    ConditionConfig,
    GridConfig,
    MotionConfig,
    SiteConfig,
    StripConfig,
    hold,
)
from learnfilter.app.mover_config import MoverConfig
from learnfilter.app.recipes import BlocksConfig, ObserveConfig, RecipeConfig, StudyConfig
from learnfilter.runtime.bundle import PRECISIONS


@dataclass
class PlanConfig(Common):
    """Settings of `learnfilter plan`."""

    site: SiteConfig
    robot_radius_m: float
    out: str | None


@dataclass
class RehearseConfig(Common):
    """Settings of `learnfilter rehearse`."""

    site: SiteConfig
    strip: StripConfig
    condition: ConditionConfig
    count: int
    drives: int
    rows: int
    robot_radius_m: float
    format: str

    def __post_init__(self) -> None:
        super().__post_init__()
        for key in ("count", "drives", "rows"):
            hold(key, getattr(self, key) >= 1, "at least 1", getattr(self, key))
        hold("format", self.format in ("parquet", "csv"), "parquet or csv", self.format)


@dataclass
class TrainConfig(Common):
    """Settings of `learnfilter train`."""

    site: SiteConfig
    strip: StripConfig
    grid: GridConfig
    motion: MotionConfig
    condition: ConditionConfig
    observe: ObserveConfig
    train: RecipeConfig
    mover: MoverConfig
    start: str | None
    drives: list[str]
    blocks: BlocksConfig | None

    def __post_init__(self) -> None:
        super().__post_init__()
        started, practised = self.start is not None, self.mover.practice is not None
        hold("drives", started or not self.drives, "none, or `start` with them", self.drives)
        purpose = bool(self.drives) or practised or not started
        hold("drives", purpose, "recorded drive tables to tune on, or mover=policy", self.drives)
        on_plan = not self.drives or self.site.file is not None
        hold("site.file", on_plan, "the plan on which `drives` were recorded", self.site.file)


@dataclass
class AblateConfig(Common):
    """Settings of `learnfilter ablate`."""

    model: str
    site: SiteConfig
    conditions: dict[str, ConditionConfig]
    study: StudyConfig
    drives: list[str]
    blocks: BlocksConfig | None
    movers: list[str]
    metres: list[float]

    def __post_init__(self) -> None:
        super().__post_init__()
        steered = bool(self.movers and self.drives)
        hold("movers", not steered, "none: nobody can steer a recorded drive", self.movers)
        hold("movers", len(set(self.movers)) == len(self.movers), "different ones", self.movers)
        good = bool(self.metres) and min(self.metres) > 0
        hold("metres", good, "budgets above 0", self.metres)
        on_plan = self.site.file is not None or not self.drives
        hold("site.file", on_plan, "the plan on which `drives` were recorded", self.site.file)
        hold("conditions", bool(self.conditions), "at least one", list(self.conditions))


@dataclass
class ExportConfig(Common):
    """Settings of `learnfilter export`."""

    model: str
    contender: str
    site: SiteConfig
    precision: str
    drives: list[str]
    ablation: str | None
    out: str | None

    def __post_init__(self) -> None:
        super().__post_init__()
        hold("precision", self.precision in PRECISIONS, " or ".join(PRECISIONS), self.precision)


@dataclass
class VerifyConfig(Common):
    """Settings of `learnfilter verify`."""

    bundle: str
    outputs: str | None
    within: float | None

    def __post_init__(self) -> None:
        super().__post_init__()
        good = self.within is None or 0 < self.within < 1
        hold("within", good, "above 0 and below 1", self.within)


@dataclass
class ReplayConfig(Common):
    """Settings of `learnfilter replay`."""

    site: SiteConfig
    bundle: Any  # of the two that `bundles` takes: the composing library knows no such choice
    drive: str
    depth_kind: str | None

    def __post_init__(self) -> None:
        super().__post_init__()
        paths = self.bundles
        good = paths and all(isinstance(path, str) for path in paths) and len(set(paths)) == len(paths)
        hold("bundle", bool(good), "the folder of a bundle, or a list of different ones", self.bundle)

    @property
    def bundles(self) -> list[str]:
        """The folders, one or several."""
        return self.bundle if isinstance(self.bundle, list) else [self.bundle]


@dataclass
class DemoConfig(TrainConfig):
    """Settings of `learnfilter demo`."""

    study: StudyConfig


@dataclass
class SurveyConfig(Common):
    """Settings of `learnfilter survey`."""

    site: SiteConfig
    strip: StripConfig
    grid: GridConfig
    budget: int
    margin_nats: float
    markers: int

    def __post_init__(self) -> None:
        super().__post_init__()
        hold("budget", self.budget >= 1, "at least 1", self.budget)
        hold("margin_nats", self.margin_nats > 0, "above 0", self.margin_nats)
        hold("markers", self.markers >= 0, "at least 0", self.markers)


@dataclass
class LabelConfig(Common):
    """Settings of `learnfilter label`."""

    site: SiteConfig
    model: str
    contender: str
    drive: str
    depth_kind: str | None
    known: dict[int, list[Any]] | None  # of numbers: the composing library takes no whole ones for float

    def __post_init__(self) -> None:
        super().__post_init__()
        good = all(
            row >= 0 and len(pose) == 3 and all(type(number) in (int, float) for number in pose)
            for row, pose in (self.known or {}).items()
        )
        hold("known", good, "row: [x_m, y_m, heading_deg]", self.known)

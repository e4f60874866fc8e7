"""Typed settings of training and judging; see app/config.py."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from learnfilter.app.config import hold


@dataclass
class ObserveConfig:
    """Sizes and switches of the matcher; each can be ablated."""

    range_first_m: float
    range_growth: float
    range_rank: int
    colour_rank: int
    extra_rank: int
    strip_hidden: int
    ring_hidden: int
    kernel: int
    residual: bool
    analytic_start: bool

    def __post_init__(self) -> None:
        hold("observe.range_first_m", self.range_first_m > 0, "above 0", self.range_first_m)
        hold("observe.range_growth", self.range_growth > 0, "above 0", self.range_growth)
        for key in ("range_rank", "strip_hidden", "ring_hidden"):
            hold(f"observe.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))
        for key in ("colour_rank", "extra_rank"):
            hold(f"observe.{key}", getattr(self, key) >= 0, "at least 0", getattr(self, key))
        hold("observe.kernel", self.kernel % 2 == 1, "an odd number", self.kernel)


@dataclass
class StageConfig:
    """One stage of training; see training.loop.StageSettings."""

    iterations: int
    learning_rate: float
    warm_up: int
    clip: float
    validate_every: int
    patience: int

    def __post_init__(self) -> None:
        hold("*.iterations", self.iterations >= 0, "at least 0", self.iterations)
        hold("*.learning_rate", self.learning_rate > 0, "above 0", self.learning_rate)
        hold("*.clip", self.clip > 0, "above 0", self.clip)
        for key in ("validate_every", "patience"):
            hold(f"*.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))


@dataclass
class ShakeConfig:
    """How strips are changed while the matcher trains; see training.shake.ShakeSettings."""

    share: float
    light: float
    tint: float
    range: float
    missing: float

    def __post_init__(self) -> None:
        hold("train.shake.share", 0 <= self.share <= 1, "a share in [0, 1]", self.share)
        hold("train.shake.missing", 0 <= self.missing < 1, "a share in [0, 1)", self.missing)
        hold("train.shake.range", 0 <= self.range < 1, "in [0, 1)", self.range)
        for key in ("light", "tint"):
            hold(f"train.shake.{key}", getattr(self, key) >= 0, "at least 0", getattr(self, key))


@dataclass
class RecipeConfig:
    """What is made up to train on, and the stages."""

    sites: int
    drives: int
    rows: int
    stills: int
    validation_sites: int
    validation_steps: int
    strips: int
    decoys: int
    lengths: list[int]
    every_step: float
    hide_colour: float
    shake: ShakeConfig
    search: list[dict[str, Any]]
    tuning: StageConfig
    matching: StageConfig
    filtering: StageConfig
    recorded: StageConfig

    def __post_init__(self) -> None:
        for key in ("sites", "drives", "validation_sites", "validation_steps", "strips"):
            hold(f"train.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))
        hold("train.rows", self.rows >= 2, "at least 2", self.rows)
        for key in ("stills", "decoys"):
            hold(f"train.{key}", getattr(self, key) >= 0, "at least 0", getattr(self, key))
        lengths = bool(self.lengths) and min(self.lengths) >= 1
        hold("train.lengths", lengths, "whole numbers above 0", self.lengths)
        hold("train.every_step", self.every_step >= 0, "at least 0", self.every_step)
        hold("train.hide_colour", 0 <= self.hide_colour <= 1, "a share in [0, 1]", self.hide_colour)
        needs_stills = self.matching.iterations > 0
        hold(
            "train.stills", self.stills > 0 or not needs_stills, "above 0 for the matching stage", self.stills
        )


@dataclass
class BlocksConfig:
    """Which rows of recorded drives are used: blocks of `rows`, from block `first` on, every `every`-th."""

    rows: int
    first: int
    every: int

    def __post_init__(self) -> None:
        hold("blocks.rows", self.rows >= 1, "at least 1", self.rows)
        hold("blocks.first", self.first >= 0, "at least 0", self.first)
        hold("blocks.every", self.every >= 1, "at least 1", self.every)


@dataclass
class StudyConfig:
    """How much evidence is gathered, and how it is judged."""

    sites: int
    drives: int
    rows: int
    marks: list[int]
    mark: int
    within_m: float
    within_deg: float
    models: list[str] | None
    hide_colour: bool
    oracle: bool

    def __post_init__(self) -> None:
        for key in ("sites", "drives"):
            hold(f"study.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))
        hold("study.rows", self.rows >= 2, "at least 2", self.rows)
        good = bool(self.marks) and min(self.marks) >= 1
        hold("study.marks", good, "numbers of strips, at least 1", self.marks)
        hold("study.mark", self.mark in self.marks, f"one of study.marks={self.marks}", self.mark)
        hold("study.mark", self.mark <= self.rows, f"at most study.rows={self.rows}", self.mark)
        hold("study.within_m", self.within_m > 0, "above 0", self.within_m)
        hold("study.within_deg", self.within_deg > 0, "above 0", self.within_deg)

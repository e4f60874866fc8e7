"""Typed settings of training and judging; see app/config.py."""

from __future__ import annotations

from dataclasses import dataclass

from learnfilter.app.config import hold

# Strips after which filters are judged (ablation.study.MARKS; not imported, for that needs torch).
MARKS = (1, 2, 4, 8, 16, 32)


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
        hold("train.*.iterations", self.iterations >= 0, "at least 0", self.iterations)
        hold("train.*.learning_rate", self.learning_rate > 0, "above 0", self.learning_rate)
        hold("train.*.clip", self.clip > 0, "above 0", self.clip)
        for key in ("validate_every", "patience"):
            hold(f"train.*.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))


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
    tuning: StageConfig
    matching: StageConfig
    filtering: StageConfig

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
class StudyConfig:
    """How much evidence is gathered, and after how many strips the verdict is given."""

    sites: int
    drives: int
    rows: int
    mark: int
    hide_colour: bool

    def __post_init__(self) -> None:
        for key in ("sites", "drives"):
            hold(f"study.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))
        hold("study.rows", self.rows >= 2, "at least 2", self.rows)
        hold("study.mark", self.mark in MARKS, f"one of {MARKS}", self.mark)
        hold("study.mark", self.mark <= self.rows, f"at most study.rows={self.rows}", self.mark)

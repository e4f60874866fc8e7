"""Typed settings of movers; see app/config.py."""

from __future__ import annotations

from dataclasses import dataclass

from learnfilter.app.config import hold
from learnfilter.app.recipes import StageConfig


@dataclass
class MoveConfig:
    """One short motion: straight ahead, then turn."""

    distance_m: float
    turn_deg: float


@dataclass
class GradientConfig:
    """How a policy is updated; see training.policy_gradient.GradientSettings."""

    discount: float
    smoothing: float
    clip: float
    entropy_weight: float
    value_weight: float
    updates: int

    def __post_init__(self) -> None:
        for key in ("discount", "smoothing"):
            value = getattr(self, key)
            hold(f"mover.practice.gradient.{key}", 0 <= value <= 1, "a share in [0, 1]", value)
        for key in ("entropy_weight", "value_weight"):
            value = getattr(self, key)
            hold(f"mover.practice.gradient.{key}", value >= 0, "not below 0", value)
        hold("mover.practice.gradient.clip", 0 < self.clip < 1, "above 0 and below 1", self.clip)
        hold("mover.practice.gradient.updates", self.updates >= 1, "at least 1", self.updates)


@dataclass
class PracticeConfig:
    """Where and how a policy learns to move."""

    model: str
    families: list[str]
    width_m: float
    depth_m: float
    sites: int
    validation_sites: int
    validation_episodes: int
    episodes: int
    strips: int
    reward: str
    teacher: str
    lessons: int
    lessons_at_once: int
    imitation: StageConfig
    trying: StageConfig
    gradient: GradientConfig

    def __post_init__(self) -> None:
        for key in ("sites", "validation_sites", "validation_episodes", "episodes", "lessons_at_once"):
            hold(f"mover.practice.{key}", getattr(self, key) >= 1, "at least 1", getattr(self, key))
        hold("mover.practice.strips", self.strips >= 2, "at least 2", self.strips)
        known = self.teacher in ("wander", "least-entropy")
        hold("mover.practice.teacher", known, "wander or least-entropy", self.teacher)
        hold("mover.practice.lessons", self.lessons >= 0, "at least 0", self.lessons)
        every, updates = self.trying.validate_every, self.gradient.updates
        whole = every % updates == 0
        hold(
            "mover.practice.trying.validate_every", whole, f"a multiple of gradient.updates={updates}", every
        )


@dataclass
class MoverConfig:
    """What movers choose among, what they keep clear of, what motion costs, and how a policy is trained."""

    moves: list[MoveConfig]
    clearance_m: float
    skirt_m: float
    price_nats: float
    price_nats_per_m: float
    price_nats_per_rad: float
    practice: PracticeConfig | None

    def __post_init__(self) -> None:
        for name in ("price_nats", "price_nats_per_m", "price_nats_per_rad"):
            hold(f"mover.{name}", getattr(self, name) >= 0, "not below 0", getattr(self, name))

"""Train the policy of a run: it tries its motions on invented sites with one of the run's models."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path

import torch

from learnfilter.app.board import Board
from learnfilter.app.build import build_conditions, build_strip, check_invented
from learnfilter.app.config import hold
from learnfilter.app.exporting import filter_for
from learnfilter.app.grounds import Rehearsal, make_places
from learnfilter.app.models import LEARNED, Stored, stage_facts
from learnfilter.app.mover_config import PracticeConfig
from learnfilter.app.movers import StoredPolicy, least_entropy, robot_of, store_policy
from learnfilter.app.moving import (
    Practice,
    Teacher,
    Venue,
    episodes_on,
    lessons_on,
    localizer_of,
    validation_on,
)
from learnfilter.app.progress import Tick, progress
from learnfilter.app.training import config_hash, stage_settings
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.seeds import stream
from learnfilter.movers.policy import PolicyNet
from learnfilter.movers.wander import Wander
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.training.imitation import imitate
from learnfilter.training.loop import StageResult
from learnfilter.training.policy_gradient import GradientSettings, train_policy
from learnfilter.training.recipe import blend_kinds
from learnfilter.training.returns import RewardSettings

IMITATION, TRYING = "imitation", "trying"
HELD_OUT_SHARE = 0.2  # of the lessons, to keep weights by


def check_practice(settings: TrainConfig) -> None:
    """Refuse a practice that cannot be held, before a run folder is made and minutes are spent.

    Raises:
        ConfigError: no families, unknown ones, or a robot that cannot be.
    """
    practice = settings.mover.practice
    if practice is None:
        return
    check_invented(practice, "mover.practice")
    if settings.start is None:  # else its models are there to be asked
        names = (LEARNED, *blend_kinds(True))
        hold("mover.practice.model", practice.model in names, " or ".join(names), practice.model)
    robot_of(settings)
    rewards_of(settings)


def rewards_of(settings: TrainConfig) -> RewardSettings:
    """What the policy of a run is rewarded for."""
    mover = settings.mover
    assert mover.practice is not None
    return RewardSettings(
        mover.practice.reward, mover.price_nats, mover.price_nats_per_m, mover.price_nats_per_rad
    )


def train_mover(settings: TrainConfig, models: Mapping[str, Stored], folder: Path) -> StoredPolicy:
    """Train and store the policy of a run; taken up again where an earlier process stopped.

    Args:
        settings: of the verb, with `mover.practice`.
        models: of the run.
        folder: of the run; gets models/policy.safetensors, checkpoints/ and TensorBoard events.

    Raises:
        ConfigError: the run has no model of the name that `mover.practice.model` says.
    """
    recipe = settings.mover.practice
    assert recipe is not None
    hold("mover.practice.model", recipe.model in models, " or ".join(models), recipe.model)
    model = models[recipe.model]
    train = _plans(settings, recipe, recipe.sites, "practice")
    held_out = _plans(settings, recipe, recipe.validation_sites, "practice validation")
    net = PolicyNet(torch.Generator().manual_seed(settings.seed))
    with Board(folder / "events", model.lattices.render(train[0])) as board, progress("practice") as tick:
        school = _School(settings, _venues(settings, model, train), folder / "checkpoints", board, tick)
        stages = {IMITATION: school.imitate(net)} if recipe.lessons else {}
        stages[TRYING] = school.practise(net, _venues(settings, model, held_out))
    facts = {
        **stage_facts(stages), "model": recipe.model, "seed": settings.seed, "config": config_hash(settings),
    }  # fmt: skip
    policy = StoredPolicy(net, *robot_of(settings), facts)
    store_policy(folder / "models", policy)
    return policy


@dataclass(frozen=True)
class _School:
    """Where a policy learns.

    Attributes:
        settings: of the verb.
        venues: to practise on.
        checkpoints: folder.
        board, tick: hear how it goes.
    """

    settings: TrainConfig
    venues: list[Venue]
    checkpoints: Path
    board: Board
    tick: Tick

    @property
    def recipe(self) -> PracticeConfig:
        assert self.settings.mover.practice is not None
        return self.settings.mover.practice

    def practice(self, episodes: int) -> Practice:
        """Of so many episodes at a time."""
        return Practice(*robot_of(self.settings), rewards_of(self.settings), episodes, self.recipe.strips)

    def imitate(self, net: PolicyNet) -> StageResult:
        """Teach it what the teacher would do where wander gets."""
        recipe, seed = self.recipe, self.settings.seed
        motions, footprint = robot_of(self.settings)

        def wander() -> Wander:
            return Wander(motions, footprint)

        teachers: dict[str, Callable[[], Teacher]] = {
            "wander": wander,
            "least-entropy": partial(least_entropy, self.settings),
        }
        lessons = lessons_on(
            self.venues, self.practice(1), wander, teachers[recipe.teacher],
            recipe.lessons, stream(seed, IMITATION, "lessons"), self.tick,
        )  # fmt: skip
        kept = round(len(lessons) * (1 - HELD_OUT_SHARE))
        return imitate(
            net, motions, lessons[:kept], lessons[kept:], stage_settings(IMITATION, recipe.imitation),
            recipe.lessons_at_once, seed, self.checkpoints, self.board, self.tick,
        )  # fmt: skip

    def practise(self, net: PolicyNet, held_out: list[Venue]) -> StageResult:
        """Let it try, and keep what does best on other sites."""
        recipe, seed = self.recipe, self.settings.seed
        motions, _ = robot_of(self.settings)
        return train_policy(
            net, motions, episodes_on(self.venues, self.practice(recipe.episodes)),
            validation_on(held_out, self.practice(recipe.validation_episodes), net, seed),
            stage_settings(TRYING, recipe.trying), GradientSettings(**asdict(recipe.gradient)), seed,
            self.checkpoints, self.board, self.tick,
        )  # fmt: skip


def _plans(settings: TrainConfig, recipe: PracticeConfig, count: int, purpose: str) -> list[FloorPlan]:
    """Sites that are invented for a purpose."""
    families, conditions = tuple(recipe.families), build_conditions(settings.condition)
    rehearsal = Rehearsal(families, count, 0, 0, 0, recipe.width_m, recipe.depth_m, conditions)
    strip, radius_m = build_strip(settings.strip), settings.grid.robot_radius_m
    return [place.plan for place in make_places(rehearsal, strip, radius_m, settings.seed, purpose)]


def _venues(settings: TrainConfig, model: Stored, plans: Sequence[FloorPlan]) -> list[Venue]:
    """Sites as places to be lost on with a model."""
    conditions, radius_m = build_conditions(settings.condition), settings.grid.robot_radius_m
    return [
        Venue(plan, localizer_of(filter_for(settings, model, plan)), conditions, radius_m) for plan in plans
    ]

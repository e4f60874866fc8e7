"""How an analytic blend is tuned and a matcher trained: the stages in order."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
import torch
from torch import Tensor, nn

from learnfilter.core.seeds import stream
from learnfilter.core.strip import RingLayout
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionModel, MotionSettings
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.training.analytic import Fits, make_blend
from learnfilter.training.loop import Log, StageResult, StageSettings, run_stage
from learnfilter.training.matching import matching_loss
from learnfilter.training.samples import stretch
from learnfilter.training.shake import ShakeSettings, shake
from learnfilter.training.through_filter import filter_loss, step_losses
from learnfilter.training.validation import validate

NO_SHAKING = ShakeSettings()
Tick = Callable[[int, int, str], None]
DRIVES_AT_ONCE = 4  # of one site in an iteration; recorded drives may be many


@dataclass(frozen=True)
class FilterSettings:
    """How drives are shown to a filter in training.

    Attributes:
        lengths: numbers of strips, drawn anew each iteration.
        every_step: weight of all steps' losses beside the last one's.
        floor: see grid_filter.weigh.
        hide_colour: share of iterations in which strips lose their colour, so that one model serves
            plans and sensors without.
        validate_steps: strips of each validation course.
        shake: how strips are changed in both stages of the matcher.
    """

    lengths: tuple[int, ...] = (4, 8, 12)
    every_step: float = 1.0
    floor: float = 1e-4
    hide_colour: float = 0.2
    validate_steps: int = 8
    shake: ShakeSettings = NO_SHAKING


@dataclass(frozen=True)
class MatchingSettings:
    """Batch of the matching stage: strips and further cells an iteration."""

    strips: int = 48
    decoys: int = 128


class Trained(NamedTuple):
    """A model with the motion it was tuned with, and how each stage went."""

    model: ObservationModel
    motion: MotionModel
    stages: dict[str, StageResult]


class Trainer:
    """Training and validation grounds with what every stage shares.

    Args:
        train, held_out: grounds to train on and to choose weights by.
        scored: the held-out grounds on the lattice on which beliefs are scored, common to all models.
        filtering, matching: see their classes.
        seed: all draws come from streams under it.
        folder: for checkpoints.
        log, tick: for curves and progress.
    """

    def __init__(
        self,
        train: Sequence[Ground],
        held_out: Sequence[Ground],
        scored: Sequence[Ground],
        filtering: FilterSettings,
        matching: MatchingSettings,
        seed: int,
        folder: Path,
        log: Log,
        tick: Tick,
    ):
        self.train, self.held_out, self.scored = train, held_out, scored
        self.filtering, self.matching = filtering, matching
        self.seed, self.folder, self.log, self.tick = seed, folder, log, tick

    def tune_blend(
        self, kind: str, fits: Fits, layout: RingLayout, motion: MotionSettings, stage: StageSettings
    ) -> Trained:
        """Fit exponents and motion spread of an analytic blend through the filter."""
        model, moves = make_blend(kind, layout, fits), MotionModel(motion)
        return Trained(model, moves, {stage.name: self._filter_stage(model, moves, stage)})

    def train_matcher(
        self,
        birth: Birth,
        shape: MatcherShape,
        layout: RingLayout,
        motion: MotionSettings,
        matching: StageSettings,
        filtering: StageSettings,
    ) -> Trained:
        """Matching stage, then filter stage."""
        generator = torch.Generator().manual_seed(int(stream(self.seed, "weights").integers(2**31)))
        model, moves = Matcher(layout, birth, shape, generator), MotionModel(motion)
        stages = {matching.name: self._matching_stage(model, moves, matching)}
        own = self.filtering
        stages[filtering.name] = self._filter_stage(model, moves, filtering, own.hide_colour, own.shake)
        return Trained(model, moves, stages)

    def go_on(self, model: ObservationModel, motion: MotionModel, stage: StageSettings) -> Trained:
        """Train a model further through the filter."""
        return Trained(model, motion, {stage.name: self._filter_stage(model, motion, stage)})

    def _matching_stage(self, model: Matcher, motion: MotionModel, stage: StageSettings) -> StageResult:
        def loss_at(iteration: int) -> Tensor:
            rng = stream(self.seed, stage.name, iteration)
            ground = self.train[int(rng.integers(len(self.train)))]
            assert ground.stills is not None
            strips, truth = ground.stills
            if rng.random() < self.filtering.hide_colour:
                strips = strips.without_colour()
            strips = shake(strips, self.filtering.shake, len(strips.depth_m), rng)
            return matching_loss(
                model, ground.site, (strips, truth), rng, self.matching.strips, self.matching.decoys
            )

        return self._run(stage, {"model": model}, loss_at, model, motion)

    def _filter_stage(
        self,
        model: ObservationModel,
        motion: MotionModel,
        stage: StageSettings,
        hide_colour: float = 0.0,
        shaken: ShakeSettings = NO_SHAKING,
    ) -> StageResult:
        def loss_at(iteration: int) -> Tensor:
            rng = stream(self.seed, stage.name, iteration)
            ground = self.train[int(rng.integers(len(self.train)))]
            length = int(rng.choice(self.filtering.lengths))
            few = rng.permutation(len(ground.courses))[:DRIVES_AT_ONCE]
            odometry, strips, cell, heading = stretch([ground.courses[k] for k in few], length, rng)
            if rng.random() < hide_colour:
                strips = strips.without_colour()
            strips = shake(strips, shaken, odometry.shape[1], rng)
            losses = step_losses(
                model, motion, ground.site, odometry, strips, cell, heading, self.filtering.floor
            )
            return filter_loss(losses, self.filtering.every_step)

        return self._run(stage, {"model": model, "motion": motion}, loss_at, model, motion)

    def _run(
        self,
        stage: StageSettings,
        modules: dict[str, nn.Module],
        loss_at: Callable[[int], Tensor],
        model: ObservationModel,
        motion: MotionModel,
    ) -> StageResult:
        steps, floor = self.filtering.validate_steps, self.filtering.floor
        return run_stage(
            stage,
            modules,
            loss_at,
            lambda: validate(model, motion, self.held_out, self.scored, floor, steps),
            self.folder,
            self.log,
            self.tick,
        )


def parameters(model: ObservationModel) -> int:
    """Number of trained weights."""
    return int(np.sum([p.numel() for p in model.parameters()]))


def blend_kinds(colour: bool) -> tuple[str, ...]:
    """The analytic models that are always tuned: the opponents at full strength."""
    return ("beam", "endpoint", "beam+colour", "endpoint+colour") if colour else ("beam", "endpoint")

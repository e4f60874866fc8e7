"""One training loop for every stage: visible, resumable, stopped by iteration."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple, Protocol

import torch
from numpy.typing import NDArray
from torch import Tensor, nn

from learnfilter.core.memory import give_back_memory
from learnfilter.training.checkpoint import load_tensors, pack, save_tensors, unpack

GIVE_BACK_EVERY = 8  # iterations: oftener costs time in page faults, more seldom lets the heap grow


@dataclass(frozen=True)
class StageSettings:
    """How one stage is run.

    Attributes:
        name: of the stage; its checkpoint and its curves carry it.
        iterations: optimiser steps; zero skips the stage.
        learning_rate: peak; warms up over `warm_up` iterations, then falls along a cosine.
        warm_up: iterations.
        clip: largest norm of the gradient.
        validate_every: iterations between validations; checkpoints are written then too.
        patience: validations without improvement before the stage stops.
    """

    name: str
    iterations: int
    learning_rate: float = 3e-3
    warm_up: int = 20
    clip: float = 1.0
    validate_every: int = 50
    patience: int = 6

    def rate(self, iteration: int) -> float:
        """Learning rate at an iteration."""
        warm = min(1.0, (iteration + 1) / max(self.warm_up, 1))
        return self.learning_rate * warm * 0.5 * (1 + math.cos(math.pi * iteration / max(self.iterations, 1)))


class Validation(NamedTuple):
    """How good the current weights are.

    Attributes:
        score: lower is better.
        curves: further numbers to log.
        picture: [r c] a belief to look at, or None.
    """

    score: float
    curves: dict[str, float]
    picture: NDArray | None = None


class Log(Protocol):
    """Where numbers and beliefs of a run go."""

    def scalar(self, tag: str, value: float, iteration: int) -> None: ...
    def belief(self, tag: str, plane: NDArray, iteration: int) -> None: ...


class StageResult(NamedTuple):
    """What a stage did.

    Attributes:
        iterations: how many were run.
        best_iteration: whose weights were kept.
        best_score: their validation score.
        history: [(iteration, loss since the last validation, score)].
    """

    iterations: int
    best_iteration: int
    best_score: float
    history: list[tuple[int, float, float]]

    def after(self, done: int, loss: float, score: float) -> StageResult:
        """The same stage, validated once more."""
        history = [*self.history, (done, loss, score)]
        best = (done, score) if score < self.best_score else (self.best_iteration, self.best_score)
        return StageResult(done, *best, history)


def run_stage(
    settings: StageSettings,
    modules: dict[str, nn.Module],
    loss_at: Callable[[int], Tensor],
    validate: Callable[[], Validation],
    folder: Path,
    log: Log,
    tick: Callable[[int, int, str], None],
) -> StageResult:
    """Train `modules` in place and leave the best-by-validation weights in them.

    Interrupted anywhere, calling it again with the same arguments goes on from the last checkpoint
    and ends with the same weights, byte for byte.

    Args:
        settings: see StageSettings.
        modules: name -> module whose parameters are trained.
        loss_at: iteration -> loss; all it draws must come from a stream named by the iteration, and
            it may call backward itself on parts and return a detached total.
        validate: scores the current weights.
        folder: holds the stage's checkpoint and best weights.
        log: receives losses, scores and learning rate.
        tick: (done, total, note) after each iteration.
    """
    if settings.iterations == 0:
        return StageResult(0, 0, validate().score, [])
    parameters = [p for m in modules.values() for p in m.parameters() if p.requires_grad]
    optimiser = torch.optim.Adam(parameters, lr=settings.learning_rate)
    checkpoint = folder / f"{settings.name}.safetensors"
    best_path = folder / f"{settings.name}-best.safetensors"
    if checkpoint.exists():
        tensors, facts = load_tensors(checkpoint)
        unpack(tensors, modules, optimiser)
        history = [tuple(row) for row in facts["history"]]
        state = StageResult(facts["iteration"], facts["best_iteration"], facts["best_score"], history)
    else:
        state = StageResult(0, 0, validate().score, [])
        save_tensors(best_path, pack(modules, None), {"iteration": 0})
        _keep(checkpoint, modules, optimiser, state)
    total, since = 0.0, 0
    for iteration in range(state.iterations, settings.iterations):
        if _stale(state, settings):
            break
        total, since = total + _step(optimiser, parameters, loss_at, iteration, settings), since + 1
        done = iteration + 1
        if done % settings.validate_every == 0 or done == settings.iterations:
            result = validate()
            state = state.after(done, total / since, result.score)
            if state.best_iteration == done:
                save_tensors(best_path, pack(modules, None), {"iteration": done})
            _record(log, settings, iteration, total / since, result)
            _keep(checkpoint, modules, optimiser, state)
            total, since = 0.0, 0
        if done % GIVE_BACK_EVERY == 0:
            give_back_memory()
        note = f"{settings.name}: validation {state.best_score:.3f} at {state.best_iteration}"
        tick(done, settings.iterations, note)
    unpack(load_tensors(best_path)[0], modules, None)
    return state


def _keep(
    checkpoint: Path, modules: dict[str, nn.Module], optimiser: torch.optim.Optimizer, state: StageResult
) -> None:
    """Write down where a stage stands, so that another process can go on from there."""
    facts = state._asdict()
    facts["iteration"] = facts.pop("iterations")
    save_tensors(checkpoint, pack(modules, optimiser), facts)


def _step(
    optimiser: torch.optim.Optimizer,
    parameters: list[nn.Parameter],
    loss_at: Callable[[int], Tensor],
    iteration: int,
    settings: StageSettings,
) -> float:
    """One step of the optimiser; returns the loss before it."""
    for group in optimiser.param_groups:
        group["lr"] = settings.rate(iteration)
    optimiser.zero_grad(set_to_none=True)
    loss = loss_at(iteration)
    if loss.requires_grad:
        loss.backward()
    nn.utils.clip_grad_norm_(parameters, settings.clip)
    optimiser.step()
    return float(loss.detach())


def _stale(state: StageResult, settings: StageSettings) -> bool:
    """Whether `patience` validations have passed without a better one."""
    return state.iterations - state.best_iteration >= settings.patience * settings.validate_every


def _record(log: Log, settings: StageSettings, iteration: int, loss: float, result: Validation) -> None:
    numbers = {"loss": loss, "validation": result.score, "learning_rate": settings.rate(iteration)}
    for key, value in (numbers | result.curves).items():
        log.scalar(f"{settings.name}/{key}", value, iteration)
    if result.picture is not None:
        log.belief(f"{settings.name}/belief", result.picture, iteration)

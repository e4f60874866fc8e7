"""Warm start of a policy: choose as another mover chose."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import torch
from numpy.typing import ArrayLike
from torch import Tensor

from learnfilter.core.seeds import stream
from learnfilter.movers.policy import Decision, PolicyNet
from learnfilter.training.loop import Log, StageResult, StageSettings, Validation, run_stage
from learnfilter.training.policy_gradient import Choices, judge


def imitation_loss(policy: PolicyNet, choices: Choices, motions: Tensor) -> Tensor:
    """Cross-entropy of a teacher's choices, nats, mean over the states it was asked in."""
    log_probs, _ = judge(policy, choices, motions)
    return -choices.taken(log_probs).mean()


def imitate(
    policy: PolicyNet,
    motions: ArrayLike,
    lessons: Sequence[Decision],
    held_out: Sequence[Decision],
    stage: StageSettings,
    at_once: int,
    seed: int,
    folder: Path,
    log: Log,
    tick: Callable[[int, int, str], None],
) -> StageResult:
    """Teach a policy, in place, to choose like a teacher; see `loop.run_stage`.

    Args:
        policy: to be taught.
        motions: [m 3] it chooses from.
        lessons, held_out: the teacher's decisions to learn from, and to keep weights by.
        stage: of the optimiser.
        at_once: decisions an iteration.
        seed, folder, log, tick: see `loop.run_stage`.
    """
    moves, unseen = torch.from_numpy(np.asarray(motions, dtype=np.float32)), Choices.of(held_out)

    def loss_at(iteration: int) -> Tensor:
        some = stream(seed, stage.name, iteration).integers(len(lessons), size=at_once)
        return imitation_loss(policy, Choices.of([lessons[k] for k in some]), moves)

    def validate() -> Validation:
        with torch.no_grad():
            log_probs, _ = judge(policy, unseen, moves)
        same = (log_probs.argmax(dim=1) == unseen.choice).float().mean()
        return Validation(-float(unseen.taken(log_probs).mean()), {"same": float(same)})

    return run_stage(stage, {"policy": policy}, loss_at, validate, folder, log, tick)

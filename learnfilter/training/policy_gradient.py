"""Train a policy by what it brought about: clipped policy gradients.

Source: Williams 1992 (the score-function estimate and its baseline); Schulman, Wolski, Dhariwal, Radford,
Klimov 2017, "Proximal policy optimization algorithms" (clipped updates).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import chain
from pathlib import Path
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import ArrayLike, NDArray
from torch import Tensor

from learnfilter.core.errors import ConfigError
from learnfilter.core.seeds import stream
from learnfilter.movers.policy import Decision, Outlooks, PolicyNet
from learnfilter.training.loop import Log, StageResult, StageSettings, Validation, run_stage
from learnfilter.training.returns import advantages

TINY = 1e-8  # of a spread of advantages: where all are alike, none is better


class Episode(NamedTuple):
    """What a policy did from one start.

    Attributes:
        decisions: [t + 1]; the last, about the state it was left in, was not carried out.
        reward: [t] what came of each.
        ended: whether nothing can follow; else the episode was cut off and its last state has a value.
    """

    decisions: Sequence[Decision]
    reward: NDArray[np.floating]
    ended: bool


# (policy, generator) -> episodes that it drives as it is now
Episodes = Callable[[PolicyNet, np.random.Generator], Sequence[Episode]]


@dataclass(frozen=True)
class GradientSettings:
    """How a policy is updated.

    Attributes:
        discount: of rewards, a step.
        smoothing: of the advantage estimate, see `returns.advantages`.
        clip: largest change of an action's probability that is rewarded, as a share of it.
        entropy_weight: what a nat of the policy's entropy is worth, against advantages of spread 1.
        value_weight: of the squared error of the value.
        updates: steps of the optimiser on one batch of episodes.
    """

    discount: float = 0.97
    smoothing: float = 0.95
    clip: float = 0.2
    entropy_weight: float = 0.01
    value_weight: float = 0.5
    updates: int = 4


def log_probabilities(logits: Tensor, clear: Tensor) -> Tensor:
    """[... m] nats of each motion among the clear ones [... m]; -inf for the others."""
    return logits.masked_fill(~clear, -torch.inf).log_softmax(dim=-1)


def policy_loss(log_prob: Tensor, old_log_prob: Tensor, advantage: Tensor, clip: float) -> Tensor:
    """Negative clipped surrogate, the mean over actions taken.

    Where the probabilities are still the old ones, its gradient is that of the expected return, negated.

    Args:
        log_prob: [n] nats of the actions taken, now.
        old_log_prob: [n] when they were taken.
        advantage: [n].
        clip: see GradientSettings.
    """
    ratio = (log_prob - old_log_prob).exp()
    return -torch.minimum(ratio * advantage, ratio.clamp(1 - clip, 1 + clip) * advantage).mean()


def mean_entropy(log_probs: Tensor) -> Tensor:
    """Nats, mean over distributions [n m]; impossible actions (-inf) add nothing."""
    finite = log_probs.masked_fill(log_probs == -torch.inf, 0.0)
    return -(log_probs.exp() * finite).sum(dim=-1).mean()


def value_loss(value: Tensor, returns: Tensor) -> Tensor:
    """Mean squared error of values [n]."""
    return (value - returns).square().mean()


class Choices(NamedTuple):
    """Decisions of a batch as tensors.

    Attributes:
        outlooks: what was believed and seen.
        last: [n 3] the motion before.
        clear: [n m] the motions that were allowed.
        choice: [n] which was chosen.
    """

    outlooks: Outlooks
    last: Tensor
    clear: Tensor
    choice: Tensor

    @classmethod
    def of(cls, decisions: Sequence[Decision]) -> Choices:
        """Stacked."""
        return cls(
            Outlooks.of([decision.outlook for decision in decisions]),
            _tensor([decision.last for decision in decisions]),
            torch.from_numpy(np.stack([decision.clear for decision in decisions])),
            torch.tensor([decision.choice for decision in decisions]),
        )

    def taken(self, log_probs: Tensor) -> Tensor:
        """[n] nats of what was chosen, of those of all motions [n m]."""
        return log_probs.gather(1, self.choice[:, None])[:, 0]


def judge(policy: PolicyNet, choices: Choices, motions: Tensor) -> tuple[Tensor, Tensor]:
    """Nats of each motion [n m] and the value [n] of the states in which choices were made."""
    logits, value = policy(choices.outlooks, motions, choices.last)
    return log_probabilities(logits, choices.clear), value


class Batch(NamedTuple):
    """Episodes as the updates read them.

    Attributes:
        choices: [n] that were carried out.
        old_log_prob: [n] nats of them at the time.
        advantage: [n], of mean 0 and spread 1 (common practice, no source).
        returns: [n] what values should have been.
    """

    choices: Choices
    old_log_prob: Tensor
    advantage: Tensor
    returns: Tensor


def batch_of(
    policy: PolicyNet, episodes: Sequence[Episode], motions: Tensor, settings: GradientSettings
) -> Batch:
    """Judge episodes by the policy that drove them."""
    nats, worth, returns = [], [], []
    for episode in episodes:
        choices = Choices.of(episode.decisions)
        with torch.no_grad():
            log_probs, value = judge(policy, choices, motions)
        nats.append(choices.taken(log_probs)[:-1])
        before, last = value[:-1].double().numpy(), 0.0 if episode.ended else float(value[-1])
        worth.append(advantages(episode.reward, before, settings.discount, settings.smoothing, last))
        returns.append(worth[-1] + before)
    advantage = np.concatenate(worth)
    carried_out = chain.from_iterable(episode.decisions[:-1] for episode in episodes)
    return Batch(
        Choices.of(list(carried_out)),
        torch.cat(nats),
        _tensor((advantage - advantage.mean()) / (advantage.std() + TINY)),
        _tensor(np.concatenate(returns)),
    )


def batch_loss(policy: PolicyNet, batch: Batch, motions: Tensor, settings: GradientSettings) -> Tensor:
    """What one update makes smaller."""
    log_probs, value = judge(policy, batch.choices, motions)
    surrogate = policy_loss(
        batch.choices.taken(log_probs), batch.old_log_prob, batch.advantage, settings.clip
    )
    errors = settings.value_weight * value_loss(value, batch.returns)
    return surrogate + errors - settings.entropy_weight * mean_entropy(log_probs)


def train_policy(
    policy: PolicyNet,
    motions: ArrayLike,
    episodes: Episodes,
    validate: Callable[[], Validation],
    stage: StageSettings,
    settings: GradientSettings,
    seed: int,
    folder: Path,
    log: Log,
    tick: Callable[[int, int, str], None],
) -> StageResult:
    """Train a policy in place and leave the best-by-validation weights in it; see `loop.run_stage`.

    An iteration is one update; `settings.updates` of them share the episodes that the policy drove before
    the first.

    Args:
        policy: to be trained.
        motions: [m 3] it chooses from.
        episodes: drives episodes; all it draws comes from the generator, named by the batch's number.
        validate: scores the current weights.
        stage: of the updates.
        settings: see GradientSettings.
        seed, folder, log, tick: see `loop.run_stage`.

    Raises:
        ConfigError: a checkpoint would fall between two updates on the same episodes.
    """
    if stage.validate_every % settings.updates:
        raise ConfigError(
            "a run taken up again would lack its episodes", place=f"{stage.name}.validate_every",
            expected=f"a multiple of updates = {settings.updates}", got=stage.validate_every,
        )  # fmt: skip
    moves = _tensor(motions)
    batch: Batch | None = None

    def loss_at(iteration: int) -> Tensor:
        nonlocal batch
        number, update = divmod(iteration, settings.updates)
        if update == 0:
            driven = episodes(policy, stream(seed, stage.name, number))
            batch = batch_of(policy, driven, moves, settings)
            reward = float(np.mean([episode.reward.sum() for episode in driven]))
            log.scalar(f"{stage.name}/reward", reward, iteration)
        assert batch is not None
        return batch_loss(policy, batch, moves, settings)

    return run_stage(stage, {"policy": policy}, loss_at, validate, folder, log, tick)


def _tensor(values: ArrayLike) -> Tensor:
    return torch.from_numpy(np.asarray(values, dtype=np.float32))

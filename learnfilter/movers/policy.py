"""The learned mover, and its network as it is trained.

`runtime/policy.py` explains the network and runs it on the robot; a change here must go there, and a test
holds both together.  Episodes are driven by the robot's form of it, updates are made to this one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor, nn

from learnfilter.movers.contract import Situation
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.moves import MOTIONS, Footprint, Motion, check_motions, clear_motions
from learnfilter.runtime.outlook import Outlook
from learnfilter.runtime.policy import (
    FAR_M,
    MODE_FACTS,
    MODE_WIDTH,
    MOTION_FACTS,
    MOTION_WIDTH,
    RobotPolicy,
    best,
)
from learnfilter.runtime.proposing import STILL


class Outlooks(NamedTuple):
    """Outlooks of a batch as tensors; the axes of `Outlook`, batch first."""

    share: Tensor
    place: Tensor
    view: Tensor
    seen: Tensor
    entropy: Tensor

    @classmethod
    def of(cls, outlooks: Sequence[Outlook]) -> Outlooks:
        """Stacked."""
        return cls(*(torch.from_numpy(np.stack(field)).float() for field in zip(*outlooks, strict=True)))


class PolicyNet(nn.Module):
    """Scores motions, and says what return to expect.

    Args:
        generator: draws the first weights; the last layers are small, so that it begins by liking all
            motions alike.
    """

    def __init__(self, generator: torch.Generator):
        super().__init__()
        self.mode_in = nn.Linear(MODE_FACTS, MODE_WIDTH)
        self.mode_out = nn.Linear(MODE_WIDTH, MODE_WIDTH)
        self.motion_in = nn.Linear(MOTION_FACTS, MOTION_WIDTH)
        self.motion_out = nn.Linear(MOTION_WIDTH, 1)
        self.value_out = nn.Linear(MOTION_WIDTH, 1)
        for name, layer in self.named_children():
            assert isinstance(layer, nn.Linear)
            gain = 0.01 if name in ("motion_out", "value_out") else 2**0.5
            nn.init.orthogonal_(layer.weight, gain, generator=generator)
            nn.init.zeros_(layer.bias)

    def forward(self, outlooks: Outlooks, motions: Tensor, last: Tensor) -> tuple[Tensor, Tensor]:
        """Logits [b m] of the motions and expected return [b].

        Args:
            outlooks: of b situations, their views after `motions`.
            motions: [m 3] to choose among.
            last: [b 3] the motion before; zeros at the start.
        """
        embedded = self._embed(outlooks)  # [b k m e]
        weight = (outlooks.share / outlooks.share.sum(dim=1, keepdim=True))[:, :, None, None]
        mean = (weight * embedded).sum(dim=1)
        spread = (weight * (embedded - mean[:, None]) ** 2).sum(dim=1)
        once = torch.cat(
            [
                _facts(last),
                outlooks.entropy[:, None],
                outlooks.share.amax(dim=1, keepdim=True),
                outlooks.seen,
            ],
            dim=1,
        )
        count = len(motions)
        own, once = _facts(motions).expand(len(once), -1, -1), once[:, None].expand(-1, count, -1)
        hidden = torch.relu(self.motion_in(torch.cat([mean, spread, own, once], dim=2)))
        return self.motion_out(hidden)[..., 0], self.value_out(hidden.mean(dim=1))[:, 0]

    def _embed(self, outlooks: Outlooks) -> Tensor:
        far, turned = torch.tanh(outlooks.place[..., :2] / FAR_M), outlooks.place[..., 2:]
        mode = torch.cat([far, turned, outlooks.share[..., None]], dim=2)
        mode = mode[:, :, None].expand(-1, -1, outlooks.view.shape[2], -1)
        return self.mode_out(torch.relu(self.mode_in(torch.cat([outlooks.view, mode], dim=3))))

    def weights(self) -> dict[str, NDArray[np.float32]]:
        """What the robot needs, by name: all but the head that expects returns."""
        return {
            name: tensor.detach().numpy().copy()
            for name, tensor in self.state_dict().items()
            if not name.startswith("value_out")
        }

    def robot(self) -> RobotPolicy:
        """Its scores as the robot computes them, with the weights of now."""
        return RobotPolicy(Arrays(Path("policy"), self.weights()))


class Decision(NamedTuple):
    """What a policy decided, and from what: all that learning from it takes.

    Attributes:
        outlook: what was believed and seen.
        last: [3] the motion before.
        clear: [m] the motions that were allowed.
        choice: which was chosen.
    """

    outlook: Outlook
    last: NDArray[np.float64]
    clear: NDArray[np.bool_]
    choice: int


@dataclass(frozen=True)
class Policy:
    """A mover that has learned.

    Attributes:
        robot: scores the motions.
        motions: to choose from; among them a turn on the spot to either side.
        footprint: the robot.
        explores: whether motions are drawn by the softmax of their scores, as in training, instead of
            the best being made.
    """

    robot: RobotPolicy
    motions: tuple[Motion, ...] = MOTIONS
    footprint: Footprint = Footprint()  # noqa: RUF009 - immutable
    explores: bool = False

    def __post_init__(self) -> None:
        check_motions(self.motions)

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """See `Mover.next`."""
        return self.motions[self.decide(situation, rng).choice]

    def decide(self, situation: Situation, rng: np.random.Generator) -> Decision:
        """The choice of a motion with what it was made from; arguments as `next`."""
        clear = clear_motions(self.motions, situation.depth_m, situation.bearings_rad, self.footprint)
        outlook, last = situation.localizer.outlook(self.motions), np.array(situation.last or STILL)
        logits = self.robot.logits(outlook, np.array(self.motions), last)
        if not self.explores:
            return Decision(outlook, last, clear, best(logits, clear))
        likely = np.exp(logits.astype(float) - logits[clear].max()) * clear
        return Decision(outlook, last, clear, int(rng.choice(len(likely), p=likely / likely.sum())))


def _facts(motions: Tensor) -> Tensor:
    """[... 4] of motions [... 3]: metres forward and left, cosine and sine of the turn."""
    return torch.cat([motions[..., :2], torch.cos(motions[..., 2:]), torch.sin(motions[..., 2:])], dim=-1)

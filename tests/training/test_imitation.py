"""A policy learns to choose as a teacher does."""

import numpy as np
import pytest
import torch

from learnfilter.movers.policy import PolicyNet
from learnfilter.training.imitation import imitate, imitation_loss
from learnfilter.training.loop import StageSettings
from learnfilter.training.policy_gradient import Choices
from tests.training.deciding import MOTIONS, decision
from tests.training.tiny import Silent

STAGE = StageSettings("imitation", 150, learning_rate=0.01, warm_up=0, validate_every=50)


def lessons(count, seed):
    """A teacher that makes the motion after which the two places differ most."""
    rng = np.random.default_rng(seed)
    decisions = [decision(rng) for _ in range(count)]
    for at, one in enumerate(decisions):
        best = int(rng.integers(len(MOTIONS)))
        view = one.outlook.view.copy()
        view[1] = view[0]
        view[1, best] = 1 - view[0, best]
        outlook = one.outlook._replace(view=view)
        decisions[at] = one._replace(outlook=outlook, choice=best)
    return decisions


def test_an_untaught_policy_knows_nothing_of_the_choice():
    """log 3 nats, up to what a last layer of gain 0.01 says."""
    net = PolicyNet(torch.Generator().manual_seed(0))
    loss = imitation_loss(net, Choices.of(lessons(50, 0)), torch.tensor(MOTIONS, dtype=torch.float32))
    assert float(loss.detach()) == pytest.approx(np.log(3), abs=0.03)


def test_a_taught_policy_chooses_alike_in_states_it_has_not_seen(tmp_path):
    """Where the modes' views differ is where to look: the spread over modes is all it needs."""
    net, log = PolicyNet(torch.Generator().manual_seed(0)), Silent()
    imitate(net, MOTIONS, lessons(200, 0), lessons(100, 1), STAGE, 32, 0, tmp_path, log, lambda *told: None)
    assert log.scalars["imitation/same"][-1][1] > 0.95

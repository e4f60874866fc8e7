"""Gradients of policies against enumeration (check_values I10 to I12), and the training of one."""

import itertools
from dataclasses import replace

import numpy as np
import pytest
import torch
from torch.testing import assert_close

from learnfilter.core.errors import ConfigError
from learnfilter.movers.policy import PolicyNet
from learnfilter.training.loop import StageSettings, Validation
from learnfilter.training.policy_gradient import (
    Choices,
    Episode,
    GradientSettings,
    batch_of,
    judge,
    log_probabilities,
    mean_entropy,
    policy_loss,
    train_policy,
)
from learnfilter.training.returns import discounted
from tests.training.deciding import MOTIONS, decision
from tests.training.tiny import Silent

# Softmax bandit of I10: probabilities 1/6, 1/3, 1/2, rewards 1, 2, 3.
THETA, REWARD = torch.tensor([1.0, 2.0, 3.0], dtype=torch.float64).log(), torch.tensor([1.0, 2.0, 3.0])
DRAWS = [0, 1, 1, 2, 2, 2]  # each action as often as it is drawn: means over them are expectations
RETURN = 7 / 3
SURE = torch.ones(3, dtype=torch.bool)


def gradient(actions, advantage, old=None, clip=0.2):
    """Of the negative loss, in theta."""
    theta = THETA.clone().requires_grad_()
    log_prob = log_probabilities(theta, SURE)[actions]
    old = log_prob.detach() if old is None else old
    policy_loss(log_prob, old, advantage.double(), clip).backward()
    return -theta.grad


@pytest.mark.parametrize("baseline", [0.0, 1.0, RETURN, -5.0])
def test_the_expected_gradient_is_that_of_the_return_whatever_the_baseline(baseline):
    """I10, I11: pi (r - J) = (-2/9, -1/9, 1/3); Sutton and Barto 2018, section 2.8."""
    expected = torch.tensor([-2 / 9, -1 / 9, 1 / 3], dtype=torch.float64)
    assert_close(gradient(DRAWS, REWARD[DRAWS] - baseline), expected, rtol=0, atol=1e-7)


@pytest.mark.parametrize(("baseline", "expected"), [(0.0, 2.7160494), (RETURN, 0.2530864)])
def test_a_baseline_takes_variance_off(baseline, expected):
    """I11, Williams 1992: summed variance of single draws, enumerated."""
    single = torch.stack([gradient([a], REWARD[[a]] - baseline) for a in DRAWS])
    assert float(single.var(dim=0, correction=0).sum()) == pytest.approx(
        expected, abs=1e-6
    )  # float32 rewards


def test_entropy_and_its_gradient():
    """I10: 1.0114043 nats; gradient (.1300592, .0290693, -.1591285)."""
    theta = THETA.clone().requires_grad_()
    nats = mean_entropy(log_probabilities(theta, SURE)[None])
    nats.backward()
    assert float(nats.detach()) == pytest.approx(1.0114043, abs=1e-7)
    expected = torch.tensor([0.1300592, 0.0290693, -0.1591285], dtype=torch.float64)
    assert_close(theta.grad, expected, rtol=0, atol=1e-7)


def test_motions_that_are_not_clear_have_no_part():
    """The others share the probability; entropy is that of a fair coin, and gradients stay finite."""
    theta = torch.tensor([0.3, 5.0, 0.3], requires_grad=True)
    log_probs = log_probabilities(theta, torch.tensor([True, False, True]))
    assert_close(log_probs.exp(), torch.tensor([0.5, 0.0, 0.5]))
    nats = mean_entropy(log_probs[None])
    nats.backward()
    assert float(nats.detach()) == pytest.approx(np.log(2), abs=1e-6)
    assert_close(theta.grad, torch.zeros(3))


@pytest.mark.parametrize(
    ("ratio", "advantage", "moves"),
    [(1.3, 1.0, False), (1.1, 1.0, True), (0.7, 1.0, True), (0.7, -1.0, False), (1.3, -1.0, True)],
)
def test_clipping_stops_what_has_moved_far_enough(ratio, advantage, moves):
    """Schulman et al. 2017, figure 1: no gradient past 1 + clip for gains, below 1 - clip for losses."""
    old = log_probabilities(THETA, SURE)[[1]] - np.log(ratio)
    assert bool(gradient([1], torch.tensor([advantage]), old).abs().max() > 0) is moves


# ---- short corridor, check_values I12: three states, actions switched in the second, -1 a step -------------
LEADS = {(0, 0): 0, (0, 1): 1, (1, 0): 2, (1, 1): 0, (2, 0): 1, (2, 1): None}  # (state, action) -> state


def corridor(p):
    """[3 3] chances from state to state where action 1 is taken with chance p."""
    step = np.zeros((3, 3))
    for (state, action), after in LEADS.items():
        if after is not None:
            step[state, after] += p if action else 1 - p
    return step


@pytest.mark.parametrize(
    ("p", "expected"), [(0.05, -82.1052632), (0.5, -12.0), (2 - np.sqrt(2), -11.6568542), (0.95, -44.2105263)]
)
def test_returns_of_the_short_corridor(p, expected):
    """Sutton and Barto 2018, example 13.1: J(p) = (2p - 4) / (p (1 - p))."""
    alive = [np.array([1.0, 0.0, 0.0])]
    while alive[-1].sum() > 1e-14:
        alive.append(alive[-1] @ corridor(p))
    assert discounted([-state.sum() for state in alive], 1.0)[0] == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(("p", "expected"), [(0.5, 2.0), (2 - np.sqrt(2), 0.0)])
def test_gradient_in_the_short_corridor(p, expected):
    """dJ/dtheta with p = sigmoid(theta), over all states and actions as often as they come."""
    step = corridor(p)
    value = np.linalg.solve(np.eye(3) - step, -np.ones(3))
    visits = np.linalg.solve(np.eye(3) - step.T, [1.0, 0.0, 0.0])
    theta = torch.tensor([0.0, np.log(p / (1 - p))], dtype=torch.float64, requires_grad=True)
    log_prob = log_probabilities(theta, torch.ones(2, dtype=torch.bool))
    pairs = list(itertools.product(range(3), range(2)))
    worth = [(-1 + (0 if LEADS[pair] is None else value[LEADS[pair]])) - value[pair[0]] for pair in pairs]
    often = [visits[state] * (p if action else 1 - p) for state, action in pairs]
    weighed = torch.tensor(np.multiply(worth, often) * len(pairs))
    taken = log_prob[[action for _, action in pairs]]
    policy_loss(taken, taken.detach(), weighed, 0.2).backward()
    assert -float(theta.grad[1]) == pytest.approx(expected, abs=1e-9)


# ---- training ----------------------------------------------------------------------------------------------
SETTINGS = GradientSettings(updates=4, entropy_weight=0.0)
STAGE = StageSettings("policy", 80, learning_rate=0.01, warm_up=0, validate_every=20, clip=10.0)
GOOD = 2  # the motion that pays


def drive(net, rng):
    """Episodes of three motions drawn by the policy; each is worth 1 if it is the good one."""
    episodes = []
    for _ in range(16):
        decisions = [decision(rng) for _ in range(4)]
        with torch.no_grad():
            log_probs, _ = judge(net, Choices.of(decisions), torch.tensor(MOTIONS, dtype=torch.float32))
        drawn = [int(rng.choice(len(MOTIONS), p=row / row.sum())) for row in log_probs.double().exp().numpy()]
        decisions = [one._replace(choice=choice) for one, choice in zip(decisions, drawn, strict=True)]
        episodes.append(Episode(decisions, np.array(drawn[:-1]) == GOOD, ended=True))
    return [episode._replace(reward=episode.reward.astype(float)) for episode in episodes]


def net(seed=0):
    return PolicyNet(torch.Generator().manual_seed(seed))


def chance_of_good(policy):
    """How likely the policy makes the good motion, mean over states it has not seen."""
    rng = np.random.default_rng(99)
    choices = Choices.of([decision(rng) for _ in range(50)])
    with torch.no_grad():
        log_probs, _ = judge(policy, choices, torch.tensor(MOTIONS, dtype=torch.float32))
    return float(log_probs[:, GOOD].exp().mean())


def train(policy, folder, stage=STAGE, settings=SETTINGS, tick=lambda done, total, note: None, log=None):
    def validate():
        return Validation(1 - chance_of_good(policy), {})

    return train_policy(policy, MOTIONS, drive, validate, stage, settings, 0, folder, log or Silent(), tick)


def test_the_motion_that_pays_is_learned(tmp_path):
    """From one in three to nearly always."""
    policy, log = net(), Silent()
    assert chance_of_good(policy) == pytest.approx(1 / 3, abs=0.05)  # last layer of gain 0.01
    train(policy, tmp_path, log=log)
    assert chance_of_good(policy) > 0.9
    assert [iteration for iteration, _ in log.scalars["policy/reward"]] == list(range(0, 80, 4))


def test_training_taken_up_again_ends_with_the_same_weights(tmp_path):
    """Stopped between two updates on the same episodes, after a checkpoint."""

    def stop(done, total, note):
        if done == 30:
            raise KeyboardInterrupt

    whole, broken = net(), net()
    train(whole, tmp_path / "whole")
    with pytest.raises(KeyboardInterrupt):
        train(broken, tmp_path / "broken", tick=stop)
    broken = net(1)
    train(broken, tmp_path / "broken")
    assert_close(dict(broken.state_dict()), dict(whole.state_dict()), rtol=0, atol=0)


def test_a_checkpoint_between_updates_on_the_same_episodes_is_refused(tmp_path):
    """The episodes are not in it."""
    with pytest.raises(ConfigError, match="multiple of updates = 4"):
        train(net(), tmp_path, stage=replace(STAGE, validate_every=10))


def test_values_of_an_episode_that_was_cut_off_reach_beyond_it():
    """Its last state's value adds to the returns: by discount^3 to the first of three, at smoothing 1."""
    rng, policy = np.random.default_rng(3), net()
    episode = drive(policy, rng)[0]
    settings = replace(SETTINGS, discount=0.9, smoothing=1.0)
    moves = torch.tensor(MOTIONS, dtype=torch.float32)
    returns = [
        batch_of(policy, [episode._replace(ended=ended)], moves, settings).returns for ended in (True, False)
    ]
    last = float(judge(policy, Choices.of(episode.decisions), moves)[1][-1].detach())
    assert abs(last) > 1e-4
    expected = torch.tensor([0.729, 0.81, 0.9]) * last
    assert_close(returns[1] - returns[0], expected, rtol=1e-3, atol=1e-6)  # differences of float32 near 1

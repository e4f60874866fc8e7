"""The learned mover: its two forms agree, it depends on no order, and it drives nowhere blocked."""

from types import SimpleNamespace

import numpy as np
import pytest
import torch

from learnfilter.core.errors import ConfigError
from learnfilter.core.seeds import stream
from learnfilter.movers.contract import Situation
from learnfilter.movers.policy import Outlooks, Policy, PolicyNet
from learnfilter.runtime.moves import MOTIONS, Motion
from learnfilter.runtime.outlook import MODES, VIEW, Outlook

CAMERA = np.radians(np.linspace(-43.6, 43.6, 32))
OPEN, BLOCKED = np.full(32, 5.0), np.full(32, 0.3)
MOVES = np.array(MOTIONS)


@pytest.fixture(scope="module")
def net() -> PolicyNet:
    """Weights far from birth, so that every part speaks."""
    net = PolicyNet(torch.Generator().manual_seed(0))
    generator = torch.Generator().manual_seed(1)
    with torch.no_grad():
        for parameter in net.parameters():
            parameter.normal_(0.0, 0.3, generator=generator)
    return net


def outlook_of(seed: int, count: int = 4) -> Outlook:
    """A belief of `count` modes with views drawn at random."""
    rng = np.random.default_rng(seed)
    share, place = np.zeros(MODES), np.zeros((MODES, 4))
    share[:count] = np.sort(rng.dirichlet(np.ones(count)))[::-1] * rng.uniform(0.5, 1)
    place[:count] = rng.normal(0, 4, (count, 4))
    view = rng.uniform(0, 1, (MODES, len(MOTIONS), VIEW))
    single = (array.astype(np.float32) for array in (share, place, view, rng.uniform(0, 1, VIEW)))
    return Outlook(*single, rng.uniform())


def scores(net, outlooks, moves=MOVES, last=None):
    last = np.zeros((len(outlooks), 3)) if last is None else last
    with torch.no_grad():
        return net(Outlooks.of(outlooks), torch.tensor(moves).float(), torch.tensor(last).float())


def test_the_robot_scores_as_the_network_does(net):
    """Within 1e-5, float32 sums taken in another order, for any number of modes and any last motion."""
    outlooks = [outlook_of(seed, 1 + seed % MODES) for seed in range(60)]
    last = np.random.default_rng(0).normal(0, 0.5, (60, 3))
    robot = net.robot()
    mine = [robot.logits(outlook, MOVES, motion) for outlook, motion in zip(outlooks, last, strict=True)]
    np.testing.assert_allclose(mine, scores(net, outlooks, last=last)[0], rtol=0, atol=1e-5)


def test_the_order_of_modes_does_not_matter(net):
    """A belief is a set of places."""
    outlook, order = outlook_of(3), np.random.default_rng(0).permutation(MODES)
    share, place, view, *rest = outlook
    turned = Outlook(share[order], place[order], view[order], *rest)
    for mine, theirs in zip(scores(net, [outlook]), scores(net, [turned]), strict=True):
        torch.testing.assert_close(mine, theirs, rtol=0, atol=1e-5)


def test_rows_without_belief_say_nothing(net):
    """Whatever stands in them."""
    outlook = outlook_of(3, 2)
    spoiled = outlook._replace(view=outlook.view + 9 * (outlook.share == 0)[:, None, None])
    torch.testing.assert_close(scores(net, [outlook])[0], scores(net, [spoiled])[0], rtol=0, atol=0)


def test_scores_follow_the_motions(net):
    """Motions and their views in another order are scored in that order; the value is the same."""
    outlook, order = outlook_of(3), np.random.default_rng(0).permutation(len(MOTIONS))
    logits, value = scores(net, [outlook])
    turned, same = scores(net, [outlook._replace(view=outlook.view[:, order])], MOVES[order])
    torch.testing.assert_close(turned, logits[:, order], rtol=0, atol=1e-5)
    torch.testing.assert_close(same, value, rtol=0, atol=1e-5)


def test_it_takes_any_set_of_motions(net):
    """Scores of three motions are those they have among nine."""
    outlook = outlook_of(3)
    few, _ = scores(net, [outlook._replace(view=outlook.view[:, :3])], MOVES[:3])
    torch.testing.assert_close(few, scores(net, [outlook])[0][:, :3], rtol=0, atol=1e-5)


def test_it_is_small(net):
    """Fewer than 5,000 parameters, whatever the size of the map."""
    assert sum(parameter.numel() for parameter in net.parameters()) < 5000


def test_at_birth_it_prefers_nothing():
    """So that learning begins by trying everything: each of nine motions within 1 % of 1/9."""
    likely = torch.softmax(scores(PolicyNet(torch.Generator().manual_seed(0)), [outlook_of(1)])[0][0], dim=0)
    torch.testing.assert_close(likely, torch.full((9,), 1 / 9), rtol=0.01, atol=0)


def test_every_weight_learns(net):
    """Gradient of logits and value reaches all parameters."""
    outlooks = [outlook_of(seed) for seed in range(20)]
    logits, value = net(Outlooks.of(outlooks), torch.tensor(MOVES).float(), torch.zeros(20, 3))
    loss = torch.log_softmax(logits, 1)[:, 0].sum() + value.sum()
    # the softmax does not feel a shift of all logits, so that bias has no gradient but rounding's
    learned = {name: p for name, p in net.named_parameters() if name != "motion_out.bias"}
    gradients = torch.autograd.grad(loss, list(learned.values()))
    still = [name for name, grad in zip(learned, gradients, strict=True) if float(grad.abs().max()) == 0]
    assert still == []


class Scores:
    """A policy that likes motions as told."""

    def __init__(self, logits):
        self._logits = np.array(logits, np.float32)

    def logits(self, outlook, motions, last):
        return self._logits


def situation(depth, last=None):
    return Situation(depth, CAMERA, SimpleNamespace(outlook=lambda motions: outlook_of(0)), last)


FOUR = (Motion(0.5, 0, 0), Motion(0.25, 0, 0), Motion(0, 0, 0.5), Motion(0, 0, -0.5))


def test_the_robot_takes_the_motion_it_likes_best():
    """Of those that are clear."""
    mover = Policy(Scores([1.0, 3.0, 0.0, 2.0]), FOUR)
    assert mover.next(situation(OPEN), stream(0)) == FOUR[1]


@pytest.mark.parametrize("explores", [False, True])
def test_what_is_not_clear_is_not_chosen(explores):
    """However much it is liked."""
    mover, rng = Policy(Scores([50.0, 50.0, 0.0, 0.0]), FOUR, explores=explores), stream(0)
    assert not any(mover.next(situation(BLOCKED), rng).travels for _ in range(20))


def test_exploring_draws_by_the_softmax_of_the_scores():
    """Liked as 1 : 2 : 3 : 4, drawn as often, within 4 standard deviations of at most 0.011."""
    mover, rng = Policy(Scores(np.log([1, 2, 3, 4])), FOUR, explores=True), stream(0)
    drawn = [mover.decide(situation(OPEN), rng).choice for _ in range(2000)]
    np.testing.assert_allclose(np.bincount(drawn, minlength=4) / 2000, [0.1, 0.2, 0.3, 0.4], atol=0.044)


def test_a_decision_holds_what_it_was_made_from(net):
    """Learning scores it again and must find the same."""
    mover = Policy(net.robot())
    decision = mover.decide(situation(OPEN, MOTIONS[1]), stream(0))
    logits, _ = scores(net, [decision.outlook], last=decision.last[None])
    assert decision.choice == int(torch.where(torch.tensor(decision.clear), logits[0], -torch.inf).argmax())
    np.testing.assert_array_equal(decision.last, MOTIONS[1])


def test_motions_without_a_way_to_turn_are_refused(net):
    """Blocked, it could do nothing."""
    with pytest.raises(ConfigError, match=r"mover\.moves"):
        Policy(net.robot(), FOUR[:3])

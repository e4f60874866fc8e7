"""Closed-loop episodes: what is recorded of them, and policies learning from them."""

import numpy as np
import pytest
import torch

from learnfilter.app.moving import (
    Practice,
    Venue,
    episodes_on,
    lessons_on,
    localizer_of,
    run_episode,
    validation_on,
)
from learnfilter.core.seeds import stream
from learnfilter.export import Filter
from learnfilter.filtering.motion import MotionModel
from learnfilter.movers.least_entropy import LeastEntropy
from learnfilter.movers.policy import PolicyNet
from learnfilter.movers.wander import Wander
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.moves import MOTIONS, Footprint, Motion
from learnfilter.sim.conditions import Conditions
from learnfilter.training.returns import RewardSettings
from tests.movers.workshops import STRIP, model, plan, site
from tests.shipping import filter_of, rendered, shipped

__all__ = ["shipped"]

FOOTPRINT = Footprint(radius_m=0.25)
START = (2.875, 1.875, 0.0)


class Route:
    """A mover that knows what it will do."""

    def __init__(self, *motions):
        self.motions = list(motions)

    def next(self, situation, rng):
        return self.motions.pop(0)


@pytest.fixture(scope="module")
def venue():
    """The two workshops, bare."""
    filter_ = Filter(model(), MotionModel(), site(), STRIP, Weighing(0.2, 0.2, 1e-4))
    return Venue(plan(), localizer_of(filter_), Conditions(furniture_per_100_m2=0, people=0), 0.25)


def practice(strips=4):
    return Practice(MOTIONS, FOOTPRINT, RewardSettings("entropy", 0.0, 0.0, 0.0), 2, strips)


def run(venue, mover, strips, seed=0, **settings):
    return run_episode(
        venue.world(stream(seed, "world")), venue.localizer, mover, stream(seed), strips, **settings
    )


def test_an_episode_is_recorded_strip_by_strip(venue):
    """Half a metre ahead, a quarter turn; the third motion is chosen and not made."""
    route = Route(Motion(0.5, 0, 0), Motion(0, 0, np.pi / 2), Motion(9, 0, 0))
    record = run(venue, route, 3, start=START)
    np.testing.assert_allclose(
        record.reference, [START, (3.375, 1.875, 0), (3.375, 1.875, np.pi / 2)], atol=1e-9
    )
    np.testing.assert_allclose(record.metres, [0, 0.5, 0.5], atol=1e-9)
    np.testing.assert_allclose(record.radians, [0, 0, np.pi / 2], atol=1e-9)
    np.testing.assert_array_equal(record.motion[2], [9, 0, 0])
    np.testing.assert_array_equal(record.contacts, [0, 0, 0])


def test_contacts_are_counted_as_they_come(venue):
    """Nine metres from the middle of a room of five end at a wall."""
    record = run(venue, Route(Motion(0, 9, 0), Motion(0, 0, 1), Motion(0, 0, 1)), 3, start=START)
    np.testing.assert_array_equal(record.contacts, [0, 1, 1])


def test_the_telling_motion_makes_the_robot_sure(venue):
    """From a start with a twin, the quarter turn that shows a board: from half of the belief to most."""
    record = run(venue, Route(*[Motion(0, 0, np.pi / 2)] * 2), 2, start=START)
    assert record.near_truth[0] == pytest.approx(0.5, abs=0.2)
    assert record.near_truth[1] > 0.8


def test_a_budget_of_metres_ends_an_episode(venue):
    """After the motion that reaches it."""
    record = run(venue, Route(*[Motion(0.25, 0, 0)] * 9), 9, start=START, most_m=0.5)
    assert record.metres[-1] == pytest.approx(0.5)
    assert len(record.metres) == 3


def test_an_episode_goes_on_after_the_lock_unless_asked(venue):
    """Turning round and round, with the boards in sight half of the time."""
    turns = [Motion(0, 0, np.pi / 4)] * 12
    whole = run(venue, Route(*turns), 12, start=START)
    cut = run(venue, Route(*turns), 12, start=START, until_lock=True)
    assert len(whole.state) == 12
    assert whole.locked_at is not None
    assert len(cut.state) == whole.locked_at + 1


def test_the_same_seed_goes_the_same_way(venue):
    """Start, faults and choices."""
    first, again = (run(venue, Wander(footprint=FOOTPRINT), 6, seed=5) for _ in range(2))
    np.testing.assert_array_equal(first.estimate, again.estimate)
    np.testing.assert_array_equal(first.reference, again.reference)


def test_a_filter_in_memory_is_the_bundle_that_is_written(shipped):
    """The same belief after the same strips."""
    drive = rendered()[1][0]
    beliefs = []
    for localizer in (localizer_of(filter_of("beam+colour")), Localizer(load_bundle(shipped("beam+colour")))):
        for row in range(8):
            localizer.step(drive.odometry[row], drive.depth_m[row], drive.rgb[row], drive.time_s[row])
        beliefs.append(localizer.belief)
    np.testing.assert_array_equal(*beliefs)


def test_a_batch_of_episodes_holds_what_learning_needs(venue):
    """As many rewards as motions made, and one decision more."""
    net = PolicyNet(torch.Generator().manual_seed(0))
    episodes = episodes_on([venue], practice())(net, stream(0, "batch"))
    assert len(episodes) == 2
    for episode in episodes:
        assert len(episode.decisions) == len(episode.reward) + 1
        assert all(one.clear[one.choice] for one in episode.decisions)


def test_rewards_of_an_episode_add_up_to_the_entropy_it_removed(venue):
    """Without prices, in parts of log(poses)."""
    record, reward = practice(6).exercise(venue, Wander(footprint=FOOTPRINT), stream(2))
    poses = site().n_cells * site().grid.headings
    assert reward.sum() == pytest.approx((record.entropy[0] - record.entropy[-1]) / np.log(poses))


def test_validation_is_always_on_the_same_days(venue):
    """The same weights get the same score."""
    validate = validation_on([venue], practice(), PolicyNet(torch.Generator().manual_seed(0)), seed=3)
    assert validate() == validate()


def test_lessons_are_what_the_teacher_would_have_done(venue):
    """As many as asked for, each a clear motion."""
    lessons = lessons_on(
        [venue],
        practice(3),
        lambda: Wander(footprint=FOOTPRINT),
        lambda: LeastEntropy(footprint=FOOTPRINT),
        4,
        stream(0),
        lambda done, total, note: None,
    )
    assert len(lessons) == 4
    assert all(one.clear[one.choice] for one in lessons)

"""The best first motion in the two workshops: by exact computation, and as least-entropy chooses."""

from functools import cache

import numpy as np
import pytest
import torch

from learnfilter.app.moving import localizer_of
from learnfilter.core.colour import linear_to_srgb
from learnfilter.core.estimate import mass_near
from learnfilter.core.poses import compose
from learnfilter.core.seeds import stream
from learnfilter.export import Filter
from learnfilter.filtering.motion import MotionModel
from learnfilter.movers.contract import Situation
from learnfilter.movers.least_entropy import LeastEntropy
from learnfilter.observe.contract import Strips
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.moves import MOTIONS
from learnfilter.survey.views import predicted_strips
from tests.movers.workshops import LAYOUT, MIDDLE, STRIP, model, site, starts

NUMBERS = range(len(starts()))


def twin(pose):
    """The pose in the other workshop that a half turn about the door leads to."""
    return np.array([2 * MIDDLE[0] - pose[0], 2 * MIDDLE[1] - pose[1], pose[2] + np.pi])


def lattice(poses):
    """Cells and headings of poses that are lattice poses."""
    cell, heading, own = site().nearest_live(np.array(poses))
    assert own.all()
    return cell, heading


@cache
def features():
    return model().read(site())


def nats(poses):
    """[k n h] of the strips that the plan predicts at poses [k], under the analytic model."""
    depth, rgb = predicted_strips(site(), *lattice(poses))
    strips = Strips(torch.tensor(depth), torch.tensor(rgb), torch.tensor(LAYOUT.present()))
    with torch.no_grad():
        return model().log_likelihood(strips, features()).double().numpy()


def gain(pose, motion):
    """Nats that a motion and the strip after it tell between a pose and its twin, as likely before.

    Noise-free views of the two places are the outcomes; Bayes' rule in full for either.
    """
    pair = [compose(pose, motion), compose(twin(pose), motion)]
    cell, heading = lattice(pair)
    left = 0.0
    for seen in nats(pair)[:, cell, heading]:
        likely = np.exp(seen - seen.max())
        likely /= likely.sum()
        left += 0.5 * -sum(p * np.log(p) for p in likely if p > 0)
    return np.log(2) - left


@pytest.mark.parametrize("number", NUMBERS)
def test_the_first_strip_leaves_the_start_and_its_twin(number):
    """Half of the belief is at either, but for a tenth in all."""
    pose = starts()[number].pose
    belief = np.zeros(site().grid.shape)
    seen = nats([pose])[0]
    belief[:, site().cells[:, 0], site().cells[:, 1]] = np.exp(seen - seen.max()).T
    belief /= belief.sum()
    here, there = (mass_near(belief, site().grid, place) for place in (pose, twin(pose)))
    assert here + there > 0.9
    assert here == pytest.approx(there, rel=1e-3)  # float32 sums of 32 columns


@pytest.mark.parametrize("number", NUMBERS)
def test_one_motion_tells_them_apart_and_no_other_does(number):
    """At least 0.6 of ln 2 = 0.69 nats by the motion written down, less than 0.05 by any other."""
    pose, best = starts()[number]
    told = {motion: gain(pose, motion) for motion in MOTIONS}
    assert told.pop(best) > 0.6
    assert max(told.values()) < 0.05


def test_no_single_motion_is_always_best():
    """As many starts ask for the left as for the right."""
    turns = [start.best.turn_rad for start in starts()]
    assert len(turns) == 12
    assert sum(turns) == 0


@pytest.mark.parametrize("number", NUMBERS)
def test_least_entropy_makes_the_best_first_motion(number):
    """With the whole belief of the robot's filter after a strip without noise."""
    pose, best = starts()[number]
    localizer = localizer_of(Filter(model(), MotionModel(), site(), STRIP, Weighing(0.2, 0.2, 1e-4)))
    depth, linear = (strip[0] for strip in predicted_strips(site(), *lattice([pose])))
    localizer.step(np.zeros(3), depth, linear_to_srgb(linear))
    situation = Situation(depth, np.array(STRIP.bearings_rad), localizer, None)
    assert LeastEntropy().next(situation, stream(0, "ties")) == best

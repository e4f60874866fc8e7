"""The greedy mover, on a ring of six cells whose entropies follow by hand, and on a robot's filter."""

from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import entropy

from learnfilter.core.errors import ConfigError
from learnfilter.core.estimate import Mode
from learnfilter.core.seeds import stream
from learnfilter.movers.contract import Situation
from learnfilter.movers.least_entropy import LeastEntropy
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.moves import Footprint, Motion
from learnfilter.runtime.part import Part
from tests.shipping import STRIP, rehearsed

CAMERA = np.radians(np.linspace(-43.6, 43.6, 32))
OPEN, BLOCKED = np.full(32, 5.0), np.full(32, 0.3)
ONE, TWO = Motion(0.25, 0.0, 0.0), Motion(0.5, 0.0, 0.0)  # by as many cells
TURNS = (Motion(0.0, 0.0, 0.5), Motion(0.0, 0.0, -0.5))  # nothing changes on a ring
DOORS = np.array([True, False, True, True, False, False])


class RingFilter:
    """Six cells of 0.25 m, 0 and 2 believed in alike; doors are seen right in 0.8, walls in 0.9."""

    def __init__(self):
        self.modes = tuple(Mode(np.array([0.25 * cell, 0, 0]), 0.5, np.zeros((3, 3))) for cell in (0, 2))
        self.scale = SimpleNamespace(weigh=self._weigh)

    def foresee(self, motion):
        belief = np.array([0.5, 0, 0.5, 0, 0, 0])
        return Part(np.roll(belief, round(motion.forward_m / 0.25))[None, None], 0, 0)

    def promised(self, motion):
        ends = [round((mode.pose[0] + motion.forward_m) / 0.25) for mode in self.modes]
        return DOORS[ends].astype(float), np.zeros(2)

    def _weigh(self, prior, depth_m, rgb):
        likelihood = np.where(DOORS, 0.8, 0.1) if depth_m else np.where(DOORS, 0.2, 0.9)
        planes = prior.planes * likelihood
        return Part(planes / planes.sum(), 0, 0), 0.0


def choices(mover, depth=OPEN):
    """The motions chosen in twenty draws."""
    rng = stream(0)
    return {mover.next(Situation(depth, CAMERA, RingFilter(), None), rng) for _ in range(20)}


def free(**prices):
    return LeastEntropy((*TURNS, ONE, TWO), **prices)


def test_what_is_left_is_averaged_over_the_modes():
    """One cell on, 0 meets a wall (posterior 0.9 : 0.2) and 2 a door (0.1 : 0.8)."""
    expected = (entropy([0.9, 0.2]) + entropy([0.1, 0.8])) / 2
    assert free().expected(RingFilter(), ONE) == pytest.approx(expected, abs=1e-12)


def test_it_goes_where_the_places_look_different():
    """Both ways ahead tell a wall from a door; turning tells nothing."""
    assert choices(free(price_nats_per_m=0.0, price_nats_per_rad=0.0)) == {ONE, TWO}


def test_a_price_on_metres_prefers_the_nearer_view():
    """Both tell the same."""
    assert choices(free(price_nats_per_m=0.1)) == {ONE}


def test_a_high_price_on_metres_lets_it_stay():
    """Turning is cheaper than what the view is worth, at most ln 2."""
    assert choices(free(price_nats_per_m=10.0)) == set(TURNS)


def test_what_is_not_clear_is_not_chosen():
    """However much it would tell."""
    assert choices(free(price_nats_per_rad=0.0), BLOCKED) == set(TURNS)


def test_motions_without_a_way_to_turn_are_refused():
    """Blocked, it could do nothing."""
    with pytest.raises(ConfigError, match=r"mover\.moves"):
        LeastEntropy((ONE, TWO))


def test_it_decides_from_a_robots_belief(shipped):
    """Of motions that cost nothing it takes the one after which the filter expects to be surest."""
    localizer, drive = Localizer(load_bundle(shipped("beam+colour"))), rehearsed()[1]
    localizer.step(np.zeros(3), drive.depth_m[0], drive.rgb[0])
    mover = LeastEntropy((*TURNS, ONE), Footprint(mount=STRIP.mount), 0.0, 0.0)
    order = np.argsort(STRIP.bearings_rad)
    seen = np.full(len(order), 5.0)
    situation = Situation(seen, np.array(STRIP.bearings_rad)[order], localizer, None)
    left = [mover.expected(localizer, motion) for motion in mover.motions]
    assert mover.next(situation, stream(0)) == mover.motions[int(np.argmin(left))]
    assert max(left) < np.log(localizer.scale.poses)  # a strip tells something

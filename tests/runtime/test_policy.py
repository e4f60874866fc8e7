"""The policy on the robot: what it reads of its weights, and what one that can be worked out by hand says."""

from pathlib import Path

import numpy as np
import pytest

from learnfilter.core.errors import BundleError
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.outlook import MODES, VIEW, Outlook
from learnfilter.runtime.policy import (
    MODE_FACTS,
    MODE_WIDTH,
    MOTION_FACTS,
    MOTION_WIDTH,
    RobotPolicy,
    best,
)

MOVES = np.array([[0.5, 0.0, 0.0], [0.0, 0.0, np.pi / 2]])


def quiet() -> dict[str, np.ndarray]:
    """Weights that say nothing."""
    shapes = {
        "mode_in": (MODE_WIDTH, MODE_FACTS),
        "mode_out": (MODE_WIDTH, MODE_WIDTH),
        "motion_in": (MOTION_WIDTH, MOTION_FACTS),
        "motion_out": (1, MOTION_WIDTH),
    }
    weights = {f"{name}.weight": np.zeros(shape, np.float32) for name, shape in shapes.items()}
    return weights | {f"{name}.bias": np.zeros(shape[0], np.float32) for name, shape in shapes.items()}


def reading(fact: int, mode_fact: int | None = None) -> RobotPolicy:
    """A policy whose score is one fact of a motion, kept positive by a bias of 10."""
    weights = quiet()
    if mode_fact is not None:
        weights["mode_in.weight"][0, mode_fact] = weights["mode_out.weight"][0, 0] = 1
    weights["motion_in.weight"][0, fact] = weights["motion_out.weight"][0, 0] = 1
    weights["motion_in.bias"][0], weights["motion_out.bias"][0] = 10, -10
    return RobotPolicy(Arrays(Path("policy"), weights))


def outlook() -> Outlook:
    """Three modes of 0.4, 0.2, 0.2 whose first sector is 0.5, 0.5, 1.0 after motion 0; the rest is zero."""
    share, view = np.zeros(MODES, np.float32), np.zeros((MODES, 2, VIEW), np.float32)
    share[:3], view[:3, 0, 0] = (0.4, 0.2, 0.2), (0.5, 0.5, 1.0)
    place = np.zeros((MODES, 4), np.float32)
    place[2, 0] = 5.0
    return Outlook(share, place, view, np.zeros(VIEW, np.float32), 0.75)


def score(policy, last=(0, 0, 0)):
    return policy.logits(outlook(), MOVES, np.array(last, float))


TURNS = 2 * MODE_WIDTH + 3  # where a motion's sine of the turn stands
LAST = 2 * MODE_WIDTH + 4


@pytest.mark.parametrize(
    ("policy", "expected"),
    [
        (reading(0, 0), (0.5 / 2 + 0.5 / 4 + 1 / 4, 0)),  # weighted mean of what is promised
        (reading(MODE_WIDTH, 0), (0.5**2 * 3 / 16, 0)),  # its variance: a coin of 1 : 3, half apart
        (reading(0, VIEW), (np.tanh(1) / 4,) * 2),  # places, in units of 5 m and bounded
        (reading(0, MODE_FACTS - 1), ((0.4 * 2 + 0.2 + 0.2) / 4,) * 2),  # shares
        (reading(TURNS), (0, 1)),
        (reading(LAST + 4), (0.75, 0.75)),  # entropy
        (reading(LAST + 5), (0.4, 0.4)),  # largest share
    ],
)
def test_what_a_score_can_read(policy, expected):
    """By hand; 1e-6 is float32 beside a bias of 10."""
    np.testing.assert_allclose(score(policy), expected, rtol=0, atol=2e-6)


def test_the_last_motion_counts():
    """A robot that has just turned by a right angle: sine 1, whatever comes next."""
    np.testing.assert_allclose(score(reading(LAST + 3), (0, 0, np.pi / 2)), 1, rtol=0, atol=2e-6)


def test_the_best_is_the_best_of_what_is_clear():
    """The highest score is not clear."""
    assert best(np.array([5.0, 1.0, 2.0]), np.array([False, True, True])) == 2


@pytest.mark.parametrize(
    "spoil", [{"motion_in.weight": np.zeros((32, 9), np.float32)}, {"mode_in.bias": None}]
)
def test_weights_that_do_not_fit_are_named(spoil):
    """A wrong shape, or none."""
    weights = {name: array for name, array in (quiet() | spoil).items() if array is not None}
    with pytest.raises(BundleError, match=next(iter(spoil))):
        RobotPolicy(Arrays(Path("policy"), weights))

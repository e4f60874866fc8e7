"""Searching, locked, lost: decided strip by strip."""

import numpy as np
import pytest

from learnfilter.core.estimate import Mode
from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.standing import Standing

GRID = PoseGrid(8, 20, 20, 0.25, 0.0, 0.0)
STILL, AHEAD = np.zeros(3), np.array([1.0, 0.0, 0.0])
HERE, AHEAD_OF_HERE, AWAY = (1.125, 1.125), (2.125, 1.125), (4.125, 4.125)


def belief_at(*masses: tuple[tuple[float, float], float]) -> np.ndarray:
    """All of the mass at the centres of some cells, heading east."""
    belief = np.zeros(GRID.shape)
    for (x, y), mass in masses:
        belief[(0, *GRID.cell_of(x, y))] += mass
    return belief


def mode_at(place: tuple[float, float], mass: float) -> Mode:
    return Mode(np.array([*place, 0.0]), mass, np.zeros((3, 3)))


def after(standing: Standing, place=HERE, mass=1.0, motion=STILL, alarmed=False) -> Standing:
    """After a strip that leaves `mass` at a place, and the rest away from it."""
    rest = AWAY if place != AWAY else HERE
    belief = belief_at((place, mass), (rest, 1 - mass))
    return standing.after(mode_at(place, mass), motion, belief, GRID, alarmed)


def locked() -> Standing:
    standing = Standing()
    for _ in range(3):
        standing = after(standing)
    return standing


@pytest.mark.parametrize(
    ("masses", "expected"),
    [
        ([0.9] * 3, "locked"),
        ([0.9] * 2, "searching"),
        ([0.9, 0.9, 0.89], "searching"),
        ([0.9, 0.8, 0.9, 0.9], "searching"),
        ([0.9, 0.8, 0.9, 0.9, 0.9], "locked"),
    ],
)
def test_three_strips_running_make_a_lock(masses, expected):
    """With nine tenths of the mass near the best mode; before the first lock nothing can be lost."""
    standing = Standing()
    for mass in masses:
        standing = after(standing, mass=mass)
    assert standing.state == expected and not standing.anew


def test_a_lock_is_carried_by_the_wheels():
    """A metre ahead, and the belief is a metre ahead."""
    assert after(locked(), AHEAD_OF_HERE, motion=AHEAD).state == "locked"


@pytest.mark.parametrize(("place", "motion"), [(AWAY, STILL), (HERE, AHEAD)])
def test_a_locked_pose_that_is_given_up_is_lost(place, motion):
    """The belief leaves it, or stays behind; the search begins anew with that very strip."""
    standing = after(locked(), place, motion=motion)
    assert standing.state == "lost" and standing.anew


def test_doubt_is_not_loss():
    """Six tenths of the belief still near: neither locked nor given up."""
    standing = after(locked(), mass=0.6)
    assert standing.state == "searching" and not standing.anew


@pytest.mark.parametrize("standing", [Standing(), locked()], ids=["searching", "locked"])
def test_an_alarm_is_a_loss(standing):
    """However sure the belief is."""
    lost = after(standing, alarmed=True)
    assert lost.state == "lost" and lost.anew


def test_lost_lasts_until_the_next_lock():
    """And the search begins anew only once."""
    standing, states = after(locked(), alarmed=True), []
    for _ in range(3):
        standing = after(standing, AWAY)
        states.append((standing.state, standing.anew))
    assert states == [("lost", False), ("lost", False), ("locked", False)]

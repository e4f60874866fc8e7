"""Modes and entropy of beliefs whose answers are known."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from learnfilter.core.estimate import entropy, mass_near, mode_at, modes
from learnfilter.core.grid import PoseGrid

GRID = PoseGrid(headings=32, rows=16, columns=16, cell_m=0.25, left_m=0.0, bottom_m=0.0)
# Twins of heading 4, row 3, column 5 in a 4 x 4 m room: quarter turns about (2, 2)
TWINS = [(4, 3, 5), (12, 5, 12), (20, 12, 10), (28, 10, 3)]


def belief_at(masses):
    belief = np.zeros(GRID.shape)
    for place, mass in masses.items():
        belief[place] = mass
    return belief


def pose_of(h, r, c):
    return GRID.x_centres()[c], GRID.y_centres()[r], GRID.heading_centres()[h]


@pytest.mark.parametrize("count", [2, 4])
def test_twins_are_modes_of_equal_mass(count):
    """As many modes as a room has symmetries, 1/n of the mass each (group invariance)."""
    found = modes(belief_at(dict.fromkeys(TWINS[:count], 1 / count)), GRID, count=6)
    assert_allclose([mode.mass for mode in found], np.full(count, 1 / count))


def test_modes_stand_at_the_twins():
    """Each twin is one mode's pose."""
    found = modes(belief_at(dict.fromkeys(TWINS, 0.25)), GRID)
    assert_allclose(sorted(tuple(m.pose) for m in found), sorted(pose_of(*t) for t in TWINS), atol=1e-6)


def test_the_heaviest_mode_comes_first():
    """A broad hill with more mass outranks a higher single pose."""
    hill = {(4, 3, c): 0.2 for c in (4, 5, 6)}
    found = modes(belief_at(hill | {(20, 12, 10): 0.4}), GRID)
    assert_allclose([mode.mass for mode in found], [0.6, 0.4])


def test_mean_and_covariance_of_a_mode_are_those_of_its_mass():
    """Two cells apart, half and half: the mean between them, variance (d/2)^2 = cell^2 along x."""
    mode = mode_at(belief_at({(0, 3, 5): 0.5, (0, 3, 7): 0.5}), GRID, np.array(pose_of(0, 3, 5)))
    assert_allclose(mode.pose[:2], (GRID.x_centres()[6], GRID.y_centres()[3]))
    assert_allclose(mode.covariance, np.diag([0.25**2, 0, 0]), atol=1e-12)


def test_headings_are_averaged_across_the_cut():
    """Bins next to pi on both sides have their mean at pi, not at zero."""
    half = GRID.heading_step_rad
    mode = mode_at(belief_at({(15, 8, 8): 0.5, (17, 8, 8): 0.5}), GRID, np.array(pose_of(16, 8, 8)))
    assert_allclose(np.cos(mode.pose[2]), -1, atol=1e-12)
    assert_allclose(mode.covariance[2, 2], half**2)


@pytest.mark.parametrize(
    ("offset_m", "offset_deg", "expected"),
    [(0.0, 0, 1.0), (0.5, 0, 1.0), (0.51, 0, 0.0), (0, 15, 1.0), (0, 15.1, 0.0)],
)
def test_near_means_half_a_metre_and_fifteen_degrees(offset_m, offset_deg, expected):
    """Both limits belong to it; the definition of a lock says so."""
    x, y, heading = pose_of(3, 8, 8)
    pose = np.array([x + offset_m, y, heading + np.radians(offset_deg)])
    assert mass_near(belief_at({(3, 8, 8): 1.0}), GRID, pose) == expected


def test_a_mode_at_the_lattices_edge_is_whole():
    """The search does not leave the array."""
    assert modes(belief_at({(0, 0, 0): 1.0}), GRID)[0].mass == 1.0


@pytest.mark.parametrize(("count", "expected"), [(12, 2.4849066), (40 * 40, np.log(1600)), (1, 0.0)])
def test_entropy_of_a_uniform_belief_is_the_logarithm_of_its_size(count, expected):
    """Nats; ln 12 = 2.4849066 to the printed digits; nothing counts as 0 log 0 = 0."""
    assert_allclose(entropy(np.append(np.full(count, 1 / count), 0.0)), expected, atol=1e-7)

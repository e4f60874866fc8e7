"""Summing a belief to another lattice."""

import numpy as np
import pytest

from learnfilter.core.grid import PoseGrid
from learnfilter.core.regrid import regrid

COMMON = PoseGrid(8, 3, 4, 0.5, -1.0, 2.0)
FINER = PoseGrid(32, 12, 16, 0.125, -1.0, 2.0)


def test_mass_is_kept_and_cells_nest():
    """Lattices with the same corner, four times finer: every common cell is the sum of its 4 x 4 cells."""
    belief = np.random.default_rng(0).random(FINER.shape)
    common = regrid(belief, FINER, COMMON)
    assert common.sum() == pytest.approx(belief.sum())
    by_hand = belief.sum(0).reshape(3, 4, 4, 4).sum((1, 3))
    assert common.sum(0) == pytest.approx(by_hand)


def test_a_heading_bin_takes_half_of_the_bins_on_its_edges():
    """Bins are centred at 2 pi h / H: with four times as many, bin 0 holds -1, 0, 1 and half of -2 and 2."""
    belief = np.zeros(FINER.shape)
    belief[:, 0, 0] = np.arange(32)
    expected = 31 + 0 + 1 + 0.5 * (30 + 2)
    assert regrid(belief, FINER, COMMON)[0, 0, 0] == pytest.approx(expected)


def test_a_cell_across_an_edge_is_split():
    """A row of 0.4 m cells laid on 0.5 m ones: the second lies a quarter in the first."""
    own = PoseGrid(8, 3, 5, 0.4, -1.0, 2.0)
    belief = np.zeros(own.shape)
    belief[0, 0, 1] = 1.0
    assert regrid(belief, own, COMMON)[0, 0, :2] == pytest.approx([0.25, 0.75])


def test_a_coarser_lattice_spreads_its_mass():
    """Half as many headings: a bin's mass goes half to its own centre, a quarter to either side."""
    own = PoseGrid(4, 3, 4, 0.5, -1.0, 2.0)
    belief = np.zeros(own.shape)
    belief[1, 1, 1] = 1.0
    assert regrid(belief, own, COMMON)[:, 1, 1] == pytest.approx([0, 0.25, 0.5, 0.25, 0, 0, 0, 0])

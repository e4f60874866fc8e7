"""Lattices without a site, and beliefs on them."""

import numpy as np
import torch

from learnfilter.filtering.motion import Lattice, MotionModel, MotionSettings

NO_NOISE = MotionSettings(1e-6, 1e-6, 1e-6, 1e-6)


def lattice(headings, rows, columns, walls=(), cell_m=0.25):
    """An open hall, with the cells in `walls` (row, column) taken out."""
    live = torch.ones(rows, columns, dtype=torch.bool)
    for place in walls:
        live[place] = False
    angles = torch.arange(headings, dtype=torch.float64) * 2 * np.pi / headings
    return Lattice(live, cell_m, angles, torch.nonzero(live.flatten())[:, 0])


def at(hall, *pose):
    """[1 h r c] all mass at one pose."""
    belief = torch.zeros(1, len(hall.headings), *hall.live.shape, dtype=torch.float64)
    belief[(0, *pose)] = 1.0
    return belief


def drawn(hall, seed=0):
    """[1 h r c] a random belief on the live cells."""
    generator = torch.Generator().manual_seed(seed)
    belief = torch.rand(1, len(hall.headings), *hall.live.shape, dtype=torch.float64, generator=generator)
    belief = belief * hall.live
    return belief / belief.sum()


def motion(settings=NO_NOISE):
    """A float64 motion model."""
    return MotionModel(settings).double()


def odometry(forward_m=0.0, left_m=0.0, turn_rad=0.0):
    """[1 3]."""
    return torch.tensor([[forward_m, left_m, turn_rad]], dtype=torch.float64)

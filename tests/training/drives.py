"""Drives and stills on the small site of the contracts; their strips are random."""

import numpy as np
import torch

from learnfilter.filtering.course import Course, truth_of
from learnfilter.filtering.rollout import Steps
from tests.contracts.small import small_site, strips


def drive_on_small_site(length, seed=0):
    """Along y = 1.25 m, one cell a strip."""
    x = 0.75 + 0.5 * np.arange(length)
    poses = np.stack([x, np.full(length, 1.25), np.zeros(length)], axis=1)
    odometry = torch.zeros(length, 3)
    odometry[1:, 0] = 0.5
    steps = Steps(np.arange(length), odometry, strips(seed, length))
    return Course("drive", steps, truth_of(small_site(), poses), poses)


def stills_on_small_site(count, seed=0):
    """Strips that claim to come from random live poses."""
    rng, site = np.random.default_rng(seed), small_site()
    row, column = site.cells[rng.integers(0, site.n_cells, count)].T
    heading = site.grid.heading_centres()[rng.integers(0, site.grid.headings, count)]
    poses = np.stack([site.grid.x_centres()[column], site.grid.y_centres()[row], heading], axis=1)
    return strips(seed, count), truth_of(site, poses)

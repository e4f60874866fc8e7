"""Filter stage: negative log-probability of reference poses through the differentiable filter.

Here the model meets what single strips hide: neighbouring strips share what the plan lacks, so their
evidence must be discounted together; exponents and motion spreads are learned alongside.  Analytic
blends are tuned with the same loss on the same drives.
"""

from __future__ import annotations

import torch
from torch import Tensor

from learnfilter.filtering.grid_filter import lattice_of, start
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.rollout import rollout
from learnfilter.filtering.trace import TINY
from learnfilter.observe.contract import ObservationModel, Strips
from learnfilter.render.site import Site


def step_losses(
    model: ObservationModel,
    motion: MotionModel,
    site: Site,
    odometry: Tensor,
    strips: Strips,
    cell: Tensor,
    heading: Tensor,
    floor: float,
) -> Tensor:
    """[s b] nats of the true lattice pose after each strip, from an unknown start.

    Args:
        model, motion: what is trained.
        site: where the drives were driven.
        odometry: [s b 3].
        strips: step-major [s*b ...].
        cell, heading: [s b] true lattice poses.
        floor: see grid_filter.weigh.
    """
    steps, batch = cell.shape
    lattice = lattice_of(site)
    likelihood = model.log_likelihood(strips, model.read(site)).reshape(steps, batch, site.n_cells, -1)
    flat = lattice.cells[cell]
    rows = torch.arange(batch)
    losses = []
    states = rollout(start(lattice, batch), odometry, lambda s: likelihood[s], lattice, motion, floor)
    for step, state in enumerate(states):
        true = state.belief.flatten(2)[rows, heading[step], flat[step]]
        losses.append(-(true + TINY).log())
    return torch.stack(losses)


def filter_loss(losses: Tensor, every_step: float) -> Tensor:
    """Final step's mean loss, plus `every_step` times the mean over all steps, over their weights.

    The final step is what a user sees; the others keep early strips honest and the gradient short.
    """
    return (losses[-1].mean() + every_step * losses.mean()) / (1 + every_step)

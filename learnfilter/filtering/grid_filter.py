"""The Bayes filter on the lattice: start, predict, weigh.

Evidence is weighed in log space.  The filter takes log-likelihoods, not a model, so it cannot know
which model made them.
"""

from __future__ import annotations

from typing import NamedTuple

import torch
from torch import Tensor

from learnfilter.core.errors import ImpossibleEvidence
from learnfilter.core.shapes import check
from learnfilter.filtering.motion import Lattice
from learnfilter.render.site import Site


class FilterState(NamedTuple):
    """What is carried from strip to strip.

    Attributes:
        belief: [b h r c] probability of each pose; sums to one, zero off the live cells.
        log_evidence: [b] nats, log p(strips so far) up to the models' constants.
    """

    belief: Tensor
    log_evidence: Tensor


def lattice_of(site: Site, dtype: torch.dtype = torch.float32) -> Lattice:
    """A site's lattice as tensors."""
    cells = torch.from_numpy(site.cells[:, 0].astype("int64") * site.grid.columns + site.cells[:, 1])
    headings = torch.from_numpy(site.grid.heading_centres()).to(dtype)
    return Lattice(torch.from_numpy(site.live.copy()), site.grid.cell_m, headings, cells)


def start(lattice: Lattice, batch: int) -> FilterState:
    """Every live pose alike: the robot has just woken up."""
    headings = lattice.headings
    plane = lattice.live.to(headings.dtype) / (lattice.live.sum() * len(headings))
    belief = plane.expand(batch, len(headings), *plane.shape)
    return FilterState(belief, belief.new_zeros(batch))


def spread(log_likelihood: Tensor, lattice: Lattice) -> Tensor:
    """[b h r c] from [b n h] over live cells; zero elsewhere, where the belief is zero anyway."""
    batch, _, headings = log_likelihood.shape
    rows, columns = lattice.live.shape
    dense = log_likelihood.new_zeros(batch, headings, rows * columns)
    dense = dense.index_copy(2, lattice.cells, log_likelihood.transpose(1, 2))
    return dense.reshape(batch, headings, rows, columns)


SIDE = 1 / 8  # weight of the cell on either side of one, see `over_cells`


def over_cells(log_likelihood: Tensor, lattice: Lattice) -> Tensor:
    """[b n h] log of the mean likelihood over each cell, from that at the centres of live cells.

    A robot stands anywhere in its cell.  A filter that weighs the centre alone is sure of the wrong cell
    after a few strips, all the more the sharper the model.  Between centres the likelihood is taken to be
    linear; its mean over a cell is then 3/4 of the centre and 1/8 of either neighbour, row by row and
    column by column.  Where a neighbour is not live the others stand for it.

    Args:
        log_likelihood: [b n h] nats over live cells.
        lattice: live cells.
    """
    peak = log_likelihood.amax((1, 2), keepdim=True).detach()
    seen = spread((log_likelihood - peak).exp(), lattice)
    live = lattice.live.to(seen.dtype)
    mean = _beside(seen).flatten(2) / _beside(live).flatten().clamp(min=SIDE**2)
    own = mean.index_select(2, lattice.cells).transpose(1, 2)
    return own.clamp(min=torch.finfo(own.dtype).tiny).log() + peak


def _beside(planes: Tensor) -> Tensor:
    """Each cell of planes [... r c] averaged with its neighbours; nothing beyond the edges."""
    for axis in (-1, -2):
        last = planes.shape[axis] - 1
        after, before = planes.narrow(axis, 1, last), planes.narrow(axis, 0, last)
        none = torch.zeros_like(planes.narrow(axis, 0, 1))
        sides = torch.cat([after, none], axis) + torch.cat([none, before], axis)
        planes = (1 - 2 * SIDE) * planes + SIDE * sides
    return planes


def weigh(state: FilterState, log_likelihood: Tensor, lattice: Lattice, floor: float = 0.0) -> FilterState:
    """Condition on one strip a batch entry.

    Args:
        state: belief before the strip.
        log_likelihood: [b n h] nats over live cells.
        lattice: live cells.
        floor: share of belief spread over all live poses first: the chance, a strip, that the robot
            was carried off.  Zero asks for the exact filter.

    Raises:
        ImpossibleEvidence: no live pose explains a strip (only possible at floor zero), or the
            log-likelihood is not a number.
        ShapeError: sizes contradict each other.
    """
    check("log_likelihood", log_likelihood, "b n h", b=len(state.belief), h=len(lattice.headings))
    live = lattice.live.expand_as(state.belief)
    uniform = 1.0 / (int(lattice.live.sum()) * len(lattice.headings))  # a float, good in any precision
    prior = state.belief * (1 - floor) + floor * uniform
    possible = live & (prior > 0)
    log_prior = torch.where(possible, prior, 1.0).log()
    logits = torch.where(possible, log_prior + spread(log_likelihood, lattice), -torch.inf)
    log_z = torch.logsumexp(logits.flatten(1), dim=1)
    if not torch.isfinite(log_z).all():
        raise ImpossibleEvidence(f"log evidence is {log_z.tolist()}: no live pose explains a strip")
    belief = torch.exp(logits - log_z[:, None, None, None])
    return FilterState(belief, state.log_evidence + log_z)

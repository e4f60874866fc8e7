"""Matching stage: tell the true pose of one strip from the other poses of the site.

The loss is the cross-entropy of the true pose among all live poses, whose optimum is log p(strip | pose)
up to a constant a strip if true poses are drawn as the filter's prior is: uniformly (contrastive
estimation, van den Oord et al. 2018).  The sum over all poses is estimated: cells next to the true one
are counted in full, because that is where a filter's sharpness is decided, and the rest by a sample
weighted up to their number.  Stills are drawn uniformly, so that no driver's habits can be learned.
"""

from __future__ import annotations

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor
from torch.nn import functional as F

from learnfilter.filtering.course import Truth
from learnfilter.observe.contract import Strips, site_tensors
from learnfilter.observe.matcher import Matcher
from learnfilter.render.site import Site


def matching_loss(
    model: Matcher,
    site: Site,
    stills: tuple[Strips, Truth],
    rng: np.random.Generator,
    strips: int,
    decoys: int,
) -> Tensor:
    """Mean nats of the true poses of a batch of stills among all poses of their site.

    Candidates are all headings of the batch's own cells, of the cells around those, and of `decoys`
    more live cells.

    Args:
        model: the matcher.
        site: where the stills were taken.
        stills: strips with their lattice poses.
        rng: draws the batch and the decoys.
        strips: batch size.
        decoys: further cells.
    """
    all_strips, truth = stills
    batch = torch.from_numpy(rng.choice(len(truth.cell), size=min(strips, len(truth.cell)), replace=False))
    own = truth.cell[batch].numpy()
    around = neighbours(site, own)
    extra = rng.choice(site.n_cells, size=min(decoys, site.n_cells), replace=False)
    cells = np.unique(np.concatenate([around[around >= 0], extra]))
    psi = model.psi(*model.fixed_psi(site_tensors(site).cells(torch.from_numpy(cells))))
    scores = model.log_likelihood(all_strips.at(batch), psi)
    weights = torch.from_numpy(log_weights(cells, around, site.n_cells)).to(scores.dtype)
    target = torch.from_numpy(np.searchsorted(cells, own)) * scores.shape[2] + truth.heading[batch]
    return F.cross_entropy((scores + weights[:, :, None]).flatten(1), target)


def neighbours(site: Site, cells: NDArray[np.int64]) -> NDArray[np.int64]:
    """[b 9] live cell numbers of the 3 x 3 block around each cell [b]; -1 where none is live."""
    index = np.pad(site.index_of(), 1, constant_values=-1).astype(np.int64)
    row, column = site.cells[cells, 0], site.cells[cells, 1]
    offsets = [(r, c) for r in (0, 1, 2) for c in (0, 1, 2)]
    return np.stack([index[row + r, column + c] for r, c in offsets], axis=1)


def log_weights(cells: NDArray[np.int64], around: NDArray[np.int64], n_cells: int) -> NDArray[np.float64]:
    """[b m] log weight of each candidate [m] for each strip: 0 near its own cell, else the log of how
    many cells each sampled far one stands for."""
    near = np.zeros((len(around), len(cells)), dtype=bool)
    strip, place = np.nonzero(around >= 0)
    near[strip, np.searchsorted(cells, around[strip, place])] = True
    inside = near.sum(axis=1, keepdims=True)
    far = np.log(np.maximum(n_cells - inside, 1) / np.maximum(len(cells) - inside, 1))
    return np.where(near, 0.0, far)

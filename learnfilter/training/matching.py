"""Matching stage: tell the true pose of one strip from decoys on the same site.

Cross-entropy over candidates estimates log p(strip | pose) up to a constant a strip if true poses
and decoys come from one distribution (contrastive estimation, van den Oord et al. 2018).  Stills are
drawn uniformly from the live poses, and so are decoys: nothing of a driver's habits can be learned.
"""

from __future__ import annotations

import numpy as np
import torch
from torch import Tensor
from torch.nn import functional as F

from learnfilter.observe.contract import Strips, site_tensors
from learnfilter.observe.matcher import Matcher
from learnfilter.observe.product import match
from learnfilter.render.site import Site
from learnfilter.filtering.course import Truth


def matching_loss(
    model: Matcher,
    site: Site,
    stills: tuple[Strips, Truth],
    rng: np.random.Generator,
    strips: int = 32,
    decoys: int = 128,
) -> Tensor:
    """Mean nats by which a batch of stills misses its poses among candidates.

    Candidates are all headings of the batch's own cells and of `decoys` more live cells.

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
    own, position = torch.unique(truth.cell[batch], return_inverse=True)
    others = np.setdiff1d(rng.choice(site.n_cells, size=min(decoys, site.n_cells), replace=False), own.numpy())
    cells = torch.cat([own, torch.from_numpy(others)])
    psi = model.psi(*model.fixed_psi(site_tensors(site).cells(cells)))
    scores = match(model.phi(all_strips.at(batch)), psi, model.layout)
    target = position * scores.shape[2] + truth.heading[batch]
    return F.cross_entropy(scores.flatten(1), target)

"""Beam model: the range mixture looked up along the ring (Thrun, Burgard, Fox 2005, ch. 6)."""

from __future__ import annotations

import numpy as np
import torch
from torch import Tensor

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.observe.contract import ObservationModel, Strips
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.lookup import ring_steps, smallest_integer, sum_along_rings
from learnfilter.observe.mixture import log_ratio_table
from learnfilter.render.site import Site


class BeamModel(ObservationModel):
    """Independent columns; each reading by a fitted mixture of hit, short, none and stray.

    Args:
        layout: how strips lie on rings.
        scale: nodes of the table, fine enough that the nearest node serves.
        fit: mixture and how often each expected node occurs.
    """

    def __init__(self, layout: RingLayout, scale: RangeScale, fit: MixtureFit):
        super().__init__()
        self.layout, self.scale, self.fit = layout, scale, fit
        self.table = log_ratio_table(scale, fit.mixture, fit.expected_weight).astype(np.float32)

    def read(self, site: Site) -> np.ndarray:
        """[n p] expected node of each ring bearing."""
        return smallest_integer(expected_class(self.scale, site.range_m, site.unsure), self.scale.nodes + 2)

    def scores(self, strips: Strips, features: np.ndarray) -> Tensor:
        depth = strips.depth_m.numpy()
        rows = self.table[measured_class(self.scale, depth)] * strips.present.numpy()[:, None]
        out = sum_along_rings(np.ascontiguousarray(rows, np.float32), features, *ring_steps(self.layout))
        return torch.from_numpy(out)


def measured_class(scale: RangeScale, depth_m: np.ndarray) -> np.ndarray:
    """Nearest node of each reading; `nodes` where nothing came back."""
    node = np.rint(scale.position(np.nan_to_num(depth_m).clip(0, scale.max_range_m))).astype(np.int64)
    return np.where(np.isnan(depth_m), scale.nodes, node.clip(0, scale.nodes - 1))


def expected_class(scale: RangeScale, range_m: np.ndarray, unsure: np.ndarray) -> np.ndarray:
    """Nearest node of each expected range; `nodes` beyond reach, `nodes + 1` where unsure."""
    reach = range_m <= scale.max_range_m
    node = np.rint(scale.position(np.where(reach, range_m, 0.0))).astype(np.int64).clip(0, scale.nodes - 1)
    return np.where(unsure, scale.nodes + 1, np.where(reach, node, scale.nodes))

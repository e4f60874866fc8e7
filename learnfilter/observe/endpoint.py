"""End-point model: how far the end of each column is from the nearest surface.

Thrun, Burgard, Fox (2005), ch. 6: q = hit N(d; 0, s) + stray / max_range; readings that did not come
back are skipped.  It ignores what stands between, and q is no density in the range, so its evidence
is compared through the filter, never as a likelihood of readings.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from learnfilter.core.strip import RingLayout
from learnfilter.observe.contract import ObservationModel, Strips
from learnfilter.observe.lookup import sum_at_end_points
from learnfilter.render.site import Site

STEP_M = 0.02  # classes of distance; far below any spread worth fitting
FARTHEST_M = 2.0  # beyond this the Gaussian is nil for any spread up to 0.5 m


@dataclass(frozen=True)
class EndpointFit:
    """Spread of the distance (metres) and the share of hits; the rest is stray."""

    spread_m: float = 0.2
    hit_share: float = 0.9


def end_point_density(distance_m: np.ndarray, fit: EndpointFit, max_range_m: float) -> np.ndarray:
    """q at each distance, per metre."""
    gauss = np.exp(-0.5 * (distance_m / fit.spread_m) ** 2) / (np.sqrt(2 * np.pi) * fit.spread_m)
    return fit.hit_share * gauss + (1 - fit.hit_share) / max_range_m


class EndpointModel(ObservationModel):
    """Independent columns; each scored by the distance field at its end point."""

    def __init__(self, layout: RingLayout, max_range_m: float, fit: EndpointFit):
        super().__init__()
        self.layout, self.fit = layout, fit
        classes = (np.arange(int(FARTHEST_M / STEP_M) + 1) * STEP_M).astype(np.float64)
        self.table = np.log(end_point_density(classes, fit, max_range_m)).astype(np.float32)

    def read(self, site: Site) -> tuple:
        classes = np.rint(np.minimum(site.field_m, FARTHEST_M) / STEP_M).astype(np.uint8)
        cell = site.grid.cell_m
        x = ((site.cells[:, 1] + 0.5) * cell).astype(np.float32)
        y = ((site.cells[:, 0] + 0.5) * cell).astype(np.float32)
        headings = site.grid.heading_centres().astype(np.float32)
        return np.ascontiguousarray(classes), x, y, headings, np.float32(cell / site.field_scale)

    def log_likelihood(self, strips: Strips, features: tuple) -> Tensor:
        field, x, y, headings, sub_m = features
        depth = np.where(strips.present.numpy(), np.nan_to_num(strips.depth_m.numpy(), nan=-1.0), -1.0)
        out = sum_at_end_points(
            np.ascontiguousarray(depth, np.float32), self.layout.strip_bearings().astype(np.float32),
            self.table, field, x, y, headings, sub_m,
        )
        return torch.from_numpy(out)

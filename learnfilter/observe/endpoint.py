"""End-point model: how far the end of each column is from the nearest surface.

Thrun, Burgard, Fox (2005), ch. 6: q = hit N(d; 0, s) + stray / max_range; readings that did not come
back are skipped.  It ignores what stands between, and q is no density in the range, so its evidence
is compared through the filter, never as a likelihood of readings.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from learnfilter.core.strip import RingLayout, end_offsets
from learnfilter.observe.contract import ObservationModel, Strips
from learnfilter.observe.fitting import Sample
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


def fit_end_points(samples: Iterable[Sample], max_range_m: float, rounds: int = 30) -> EndpointFit:
    """Spread and share of hits from the distances of true end points, by expectation maximisation.

    Args:
        samples: strips with their lattice poses.
        max_range_m: of the sensor; density of stray distances is its inverse.
        rounds: of expectation maximisation.
    """
    distance = np.concatenate([_true_distances(sample) for sample in samples])
    fit = EndpointFit()
    for _ in range(rounds):
        stray = (1 - fit.hit_share) / max_range_m
        total = end_point_density(distance, fit, max_range_m)
        hit = (total - stray) / total
        spread = float(np.sqrt((hit * distance**2).sum() / hit.sum()))
        fit = EndpointFit(max(spread, STEP_M), float(np.clip(hit.mean(), 0.01, 0.99)))
    return fit


def _true_distances(sample: Sample) -> np.ndarray:
    """Distance from the end of every column to the nearest surface, from the true lattice poses."""
    site, grid = sample.site, sample.site.grid
    angle = grid.heading_centres()[sample.heading][:, None] + site.layout.strip_bearings()
    used = np.isfinite(sample.depth_m)
    row, column = end_offsets(np.where(used, sample.depth_m, 0.0), angle, grid.cell_m, site.field_scale)
    corner = site.cells[sample.cell] * site.field_scale
    y, x = corner[:, :1] + row, corner[:, 1:] + column
    rows, columns = site.field_m.shape
    inside = used & (x >= 0) & (x < columns) & (y >= 0) & (y < rows)
    return np.minimum(site.field_m[y[inside], x[inside]], FARTHEST_M)


class EndpointModel(ObservationModel):
    """Independent columns; each scored by the distance field at its end point."""

    def __init__(self, layout: RingLayout, max_range_m: float, fit: EndpointFit):
        super().__init__()
        self.layout, self.max_range_m, self.fit = layout, max_range_m, fit
        classes = (np.arange(int(FARTHEST_M / STEP_M) + 1) * STEP_M).astype(np.float64)
        self.table = np.log(end_point_density(classes, fit, max_range_m)).astype(np.float32)

    def read(self, site: Site) -> tuple:
        classes = np.rint(np.minimum(site.field_m, FARTHEST_M) / STEP_M).astype(np.uint8)
        corners = site.cells.astype(np.int64) * site.field_scale
        angles = self.layout.look_angles()
        return np.ascontiguousarray(classes), corners, angles, site.grid.cell_m, site.field_scale

    def scores(self, strips: Strips, features: tuple) -> Tensor:
        field, corners, angles, cell_m, scale = features
        depth = strips.depth_m.numpy()
        used = np.isfinite(depth) & strips.present.numpy()
        rows, columns = end_offsets(np.where(used, depth, 0.0)[:, None], angles, cell_m, scale)
        out = sum_at_end_points(rows, columns, used, self.table, field, corners[:, 0], corners[:, 1])
        return torch.from_numpy(out)

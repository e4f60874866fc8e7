"""Fit the analytic models to drives with reference poses.

Pairs are (what a column measured, what the plan predicts for it at the nearest lattice pose): the
lattice is part of the sensor as the filter sees it, so its coarseness ends up in the spread.
Expectation maximisation: Dempster, Laird, Rubin (1977); for this mixture Thrun, Burgard, Fox (2005),
ch. 6.  The rate of the truncated exponential has no closed form and is found numerically.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import DriveError
from learnfilter.core.poses import compose
from learnfilter.core.scale import RangeScale
from learnfilter.drives.drive import Drive
from learnfilter.observe.mixture import RangeMixture, component_masses
from learnfilter.render.site import Site


class Pairs(NamedTuple):
    """Measured against expected, one row a usable column.

    Attributes:
        measured_m: [k] NaN where nothing came back.
        expected_m: [k] inf where the plan has nothing within reach; unsure rays are left out.
        rgb: [k 3] measured linear RGB, NaN without.
        finish_rgb: [k 3] the finish's linear RGB, NaN where unknown.
        strip: [k] number of the strip, since a strip's columns share its light.
    """

    measured_m: NDArray[np.float64]
    expected_m: NDArray[np.float64]
    rgb: NDArray[np.float64]
    finish_rgb: NDArray[np.float64]
    strip: NDArray[np.int64]


def nearest_live(site: Site, poses: NDArray[np.float64]) -> tuple[NDArray, NDArray, NDArray]:
    """Live cell number, heading bin and whether the pose's own cell was live, for sensor poses [t 3]."""
    row, column = site.grid.cell_of(poses[:, 0], poses[:, 1])
    inside = (row >= 0) & (row < site.grid.rows) & (column >= 0) & (column < site.grid.columns)
    cell = np.where(inside, site.index_of()[row.clip(0, site.grid.rows - 1), column.clip(0, site.grid.columns - 1)], -1)
    for i in np.flatnonzero(cell < 0):
        cell[i] = np.argmin(((site.cells - [row[i], column[i]]) ** 2).sum(axis=1))
    own = inside & (np.abs(site.cells[cell] - np.stack([row, column], 1)).max(axis=1) == 0)
    return cell, site.grid.heading_of(poses[:, 2]), own


def sensor_poses(drive: Drive) -> NDArray[np.float64]:
    """[t 3] reference pose of the sensor; NaN where unknown."""
    if drive.reference is None:
        raise DriveError("the drive has no reference poses", file=drive.name, expected="x_m, y_m, heading_rad")
    return compose(drive.reference, np.asarray(drive.strip.mount))


def gather_pairs(drives: Iterable[tuple[Drive, Site]]) -> Pairs:
    """All usable columns of all drives at their reference poses."""
    parts, strips = [], 0
    for drive, site in drives:
        poses = sensor_poses(drive)
        known = np.flatnonzero(np.isfinite(poses).all(axis=1))
        cell, heading, _ = nearest_live(site, poses[known])
        layout = site.layout
        places = np.flatnonzero(layout.present())
        bearing = (heading[:, None] * layout.bearings_per_heading + layout.first + places) % layout.bearings
        sure = ~site.unsure[cell[:, None], bearing]
        finish, known_finish = site.colour()
        finish_rgb = np.where(
            known_finish[cell[:, None], bearing][..., None], finish[cell[:, None], bearing], np.nan
        )
        depth = layout.lay(drive.depth_m[known])[:, places]
        if drive.rgb is None:
            rgb = np.full((*depth.shape, 3), np.nan)
        else:
            rgb = layout.lay(srgb_to_linear(drive.rgb[known]), axis=1)[:, places]
        number = np.broadcast_to(strips + np.arange(len(known))[:, None], depth.shape)
        strips += len(known)
        parts.append(
            (depth[sure], site.range_m[cell[:, None], bearing][sure], rgb[sure], finish_rgb[sure], number[sure])
        )
    return Pairs(*(np.concatenate(column) for column in zip(*parts, strict=True)))


@dataclass(frozen=True)
class MixtureFit:
    """A fitted mixture with what it was fitted to.

    Attributes:
        mixture: the parameters.
        expected_weight: [nodes + 1] how often each expected node occurred (last: nothing).
        log_likelihood: [iterations] mean nats a column; never falls.
    """

    mixture: RangeMixture
    expected_weight: NDArray[np.float64]
    log_likelihood: tuple[float, ...]


def _counts(pairs: Pairs, scale: RangeScale) -> NDArray[np.float64]:
    """[expected nodes + 1, measured nodes + 1] how often each pair of bins occurred."""
    measured = np.rint(scale.position(np.nan_to_num(pairs.measured_m).clip(0, scale.max_range_m))).astype(int)
    measured = np.where(np.isnan(pairs.measured_m), scale.nodes, measured.clip(0, scale.nodes - 1))
    reach = pairs.expected_m <= scale.max_range_m
    expected = np.rint(scale.position(np.where(reach, pairs.expected_m, 0.0))).astype(int)
    expected = np.where(reach, expected.clip(0, scale.nodes - 1), scale.nodes)
    counts = np.zeros((scale.nodes + 1, scale.nodes + 1))
    np.add.at(counts, (expected, measured), 1.0)
    return counts


def fit_mixture(pairs: Pairs, scale: RangeScale, start: RangeMixture, iterations: int = 40) -> MixtureFit:
    """Fit the mixture to binned pairs by expectation maximisation.

    Args:
        pairs: measured against expected.
        scale: bins; a fine one costs little.
        start: where to begin; its `hit_growth_per_m` is kept.
        iterations: rounds; stops early when a round gains less than 1e-7 nats a column.
    """
    counts = _counts(pairs, scale)
    expected = np.append(scale.range_at(np.arange(scale.nodes)).clip(0, scale.max_range_m), np.inf)
    z = scale.range_at(np.arange(scale.nodes)).clip(0, scale.max_range_m)
    mixture, trace = start, []
    for _ in range(iterations):
        masses = component_masses(scale, expected, mixture)
        joint = masses * mixture.shares[None, :, None]
        total = joint.sum(axis=1)
        trace.append(float((counts * np.log(total + 1e-300)).sum() / counts.sum()))
        if len(trace) > 1 and trace[-1] - trace[-2] < 1e-7:
            break
        blame = joint / np.maximum(total, 1e-300)[:, None, :] * counts[:, None, :]
        shares = np.maximum(blame.sum(axis=(0, 2)) / counts.sum(), 1e-4)
        shares /= shares.sum()
        mixture = _maximise(mixture, shares, blame, expected, z, scale)
    weight = counts.sum(axis=1) + 1.0  # one count a node: the background must be positive everywhere
    return MixtureFit(mixture, weight, tuple(trace))


def _maximise(
    mixture: RangeMixture, shares: NDArray, blame: NDArray, expected: NDArray, z: NDArray, scale: RangeScale
) -> RangeMixture:
    """Parameters that explain the blamed counts best, one at a time (numerical: bins are coarse)."""
    mixture = replace(
        mixture,
        **dict(zip(("hit_share", "short_share", "none_share", "stray_share"), map(float, shares), strict=True)),
    )

    def loss(name: str, component: int, log_value: float) -> float:
        masses = component_masses(scale, expected, replace(mixture, **{name: float(np.exp(log_value))}))
        return -float((blame[:, component] * np.log(masses[:, component] + 1e-300)).sum())

    for name, component, low, high in (("hit_spread_m", 0, 0.02, 1.0), ("short_rate_per_m", 1, 0.01, 5.0)):
        best = minimize_scalar(
            lambda v, n=name, c=component: loss(n, c, v), bounds=(np.log(low), np.log(high)), method="bounded",
            options={"xatol": 1e-3},
        )
        if best.fun <= loss(name, component, np.log(getattr(mixture, name))):
            mixture = replace(mixture, **{name: float(np.exp(best.x))})
    return mixture

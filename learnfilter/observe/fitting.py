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

from learnfilter.core.scale import RangeScale
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


class Sample(NamedTuple):
    """Strips on one site with the lattice poses they were taken at.

    Attributes:
        site: rendered plan.
        depth_m: [t w], rgb: [t w 3] linear: strips laid on the ring, NaN where there is nothing.
        cell: [t] live cell number.
        heading: [t] heading bin.
    """

    site: Site
    depth_m: NDArray
    rgb: NDArray
    cell: NDArray[np.int64]
    heading: NDArray[np.int64]


def gather_pairs(samples: Iterable[Sample]) -> Pairs:
    """All columns with a raw column behind them and a sure ray before them, of all samples."""
    parts, strips = [], 0
    for site, depth_m, rgb, cell, heading in samples:
        layout = site.layout
        places = np.flatnonzero(layout.present())
        bearing = (heading[:, None] * layout.bearings_per_heading + layout.first + places) % layout.bearings
        colour, known = site.colour()
        ray = cell[:, None], bearing
        sure = ~site.unsure[ray]
        finish_rgb = np.where(known[ray][..., None], colour[ray], np.nan)
        number = np.broadcast_to(strips + np.arange(len(cell))[:, None], sure.shape)
        strips += len(cell)
        columns = (depth_m[:, places], site.range_m[ray], rgb[:, places], finish_rgb, number)
        parts.append(tuple(column[sure] for column in columns))
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
        **dict(
            zip(("hit_share", "short_share", "none_share", "stray_share"), map(float, shares), strict=True)
        ),
    )

    def loss(name: str, component: int, log_value: float) -> float:
        masses = component_masses(scale, expected, replace(mixture, **{name: float(np.exp(log_value))}))
        return -float((blame[:, component] * np.log(masses[:, component] + 1e-300)).sum())

    for name, component, low, high in (("hit_spread_m", 0, 0.02, 1.0), ("short_rate_per_m", 1, 0.01, 5.0)):
        best = minimize_scalar(
            lambda v, n=name, c=component: loss(n, c, v),
            bounds=(np.log(low), np.log(high)),
            method="bounded",
            options={"xatol": 1e-3},
        )
        if best.fun <= loss(name, component, np.log(getattr(mixture, name))):
            mixture = replace(mixture, **{name: float(np.exp(best.x))})
    return mixture

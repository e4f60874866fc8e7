"""The range mixture as a table of bin masses.

Four causes of a reading z given the expected range r (Thrun, Burgard, Fox 2005, ch. 6): a hit spread
about r, a short reading by something unmapped, no return, a stray reading.  Masses are integrated
over the bins of a RangeScale plus one bin 'nothing came back', so that they sum to one and a model
that learns bins can be compared with it.  A hit beyond the maximum range is 'nothing came back'.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

from learnfilter.core.errors import ConfigError
from learnfilter.core.scale import RangeScale


@dataclass(frozen=True)
class RangeMixture:
    """Parameters of the mixture.

    Attributes:
        hit_share, short_share, none_share, stray_share: how often each cause acts; sum to one.
        hit_spread_m: standard deviation of a hit at range zero.
        hit_growth_per_m: the spread at range r is hit_spread_m (1 + hit_growth_per_m r).
        short_rate_per_m: rate of the truncated exponential of short readings.
    """

    hit_share: float = 0.72
    short_share: float = 0.12
    none_share: float = 0.08
    stray_share: float = 0.08
    hit_spread_m: float = 0.15
    hit_growth_per_m: float = 0.03
    short_rate_per_m: float = 0.3

    def __post_init__(self):
        shares = (self.hit_share, self.short_share, self.none_share, self.stray_share)
        if min(shares) < 0 or abs(sum(shares) - 1) > 1e-6:
            raise ConfigError(
                "shares must not be negative and must sum to one", place="observe.beam", got=shares
            )
        if self.hit_spread_m <= 0 or self.short_rate_per_m <= 0 or self.hit_growth_per_m < 0:
            raise ConfigError("spread and rate must be positive", place="observe.beam", got=self)

    @property
    def shares(self) -> NDArray[np.float64]:
        return np.array([self.hit_share, self.short_share, self.none_share, self.stray_share])


def component_cdfs(
    z: ArrayLike, r: ArrayLike, mixture: RangeMixture, max_range_m: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Distribution functions at z of hit, short and stray, given expected range r (inf: nothing).

    A hit is cut at zero only: what lies beyond the maximum range did not come back.  A short reading
    lies in [0, min(r, max)].
    """
    z, r = np.broadcast_arrays(np.asarray(z, dtype=float), np.asarray(r, dtype=float))
    near = np.minimum(r, max_range_m)
    spread = mixture.hit_spread_m * (1 + mixture.hit_growth_per_m * near)
    below = ndtr(-near / spread)
    hit = np.where(np.isfinite(r), (ndtr((z - near) / spread) - below) / (1 - below), 0.0)
    rate = mixture.short_rate_per_m
    short = -np.expm1(-rate * np.clip(z, 0, near)) / -np.expm1(-rate * np.maximum(near, 1e-6))
    return np.clip(hit, 0, 1), np.clip(short, 0, 1), np.clip(z / max_range_m, 0, 1)


def component_masses(scale: RangeScale, r: ArrayLike, mixture: RangeMixture) -> NDArray[np.float64]:
    """[len(r), 4, nodes + 1] bin masses of hit, short, none, stray; the last bin is 'nothing'.

    Bin i holds the readings nearer to node i than to any other on the scale's own axis.
    """
    r = np.asarray(r, dtype=float)
    edges = scale.range_at(np.arange(scale.nodes + 1) - 0.5).clip(0, scale.max_range_m)
    edges[-1] = scale.max_range_m
    hit, short, stray = component_cdfs(edges[None, :], r[:, None], mixture, scale.max_range_m)
    masses = np.zeros((len(r), 4, scale.nodes + 1))
    for component, cdf in ((0, hit), (1, short), (3, stray)):
        masses[:, component, :-1] = np.diff(cdf, axis=1).clip(0)
        masses[:, component, -1] = (1 - masses[:, component, :-1].sum(axis=1)).clip(0)
    masses[:, 2, -1] = 1.0
    return masses


def bin_masses(scale: RangeScale, r: ArrayLike, mixture: RangeMixture) -> NDArray[np.float64]:
    """[len(r), nodes + 1] probability of each measured bin given the expected range; rows sum to 1."""
    return np.einsum("rkz,k->rz", component_masses(scale, r, mixture), mixture.shares)


def log_ratio_table(
    scale: RangeScale, mixture: RangeMixture, expected_weight: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Evidence of each measured bin for each expected node, log p(z | r) - log p(z), in nats.

    Args:
        scale: nodes of both axes.
        mixture: the fitted mixture.
        expected_weight: [nodes + 1] how often each expected node (last: nothing within reach)
            occurs; makes the background p(z).

    Returns:
        [nodes + 1 measured, nodes + 2 expected]; expected rows are the nodes, 'nothing within reach'
        and 'unsure', whose evidence is zero.
    """
    expected = np.append(scale.range_at(np.arange(scale.nodes)).clip(0, scale.max_range_m), np.inf)
    masses = bin_masses(scale, expected, mixture)
    weight = expected_weight / expected_weight.sum()
    floor = 1e-9  # an empty bin says 'never', which no sensor keeps; 1e-9 is -20.7 nats
    table = np.log(masses + floor) - np.log(weight @ masses + floor)
    return np.vstack([table, np.zeros((1, scale.nodes + 1))]).T

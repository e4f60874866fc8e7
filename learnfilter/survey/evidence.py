# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""Evidence for a survey: any model as plain arrays, and a ring comparison for when no model is at hand."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.scale import RangeScale
from learnfilter.render.site import Site

# (depth_m [b w], rgb [b w 3] linear, NaN where there is nothing) -> [b n h] nats up to a constant a
# strip: what the robot's runtime computes of a model.
Evidence = Callable[[NDArray[np.floating], NDArray[np.floating]], NDArray[np.floating]]

DARK = 0.02  # added before the logarithm of a colour, as a camera's noise does


@dataclass(frozen=True)
class RingComparison:
    """How alike two views must be to be taken for each other, where no model says it.

    A reading agrees with the plan within a spread, or it is a stray one; so does a colour.  Bounded, so
    that one thing the plan lacks cannot outvote a strip.

    Attributes:
        spread_m, growth_per_m: standard deviation of a range r is spread_m + growth_per_m r, to which
            that of a place within a cell is added.
        stray_share: readings that have nothing to do with the plan.
        colour_spread: standard deviation of a colour, natural logarithm of linear RGB.
        colour_stray_share: colours that have nothing to do with the plan.
        independent_rad: readings within this angle count as one, since neighbours see the same thing;
            smaller makes everything look different, larger everything alike.
    """

    spread_m: float = 0.1
    growth_per_m: float = 0.02
    stray_share: float = 0.1
    colour_spread: float = 0.35
    colour_stray_share: float = 0.2
    independent_rad: float = float(np.radians(15.0))

    def __post_init__(self) -> None:
        shares = 0 < self.stray_share < 1 and 0 < self.colour_stray_share < 1
        spreads = min(self.spread_m, self.colour_spread, self.independent_rad) > 0 <= self.growth_per_m
        if not (shares and spreads):
            raise ConfigError("out of range", place="survey", expected="positive spreads, shares in (0, 1)")

    def exponent(self, site: Site) -> float:
        """What each column's nats are multiplied by."""
        return min(1.0, site.layout.step_rad / self.independent_rad)

    def nats_a_column(self, site: Site) -> float:
        """What one column costs that shows another colour than the plan's."""
        return -self.exponent(site) * float(np.log(self.colour_stray_share))

    def of(self, site: Site) -> Evidence:
        """The comparison with every live pose of a site."""
        scale = RangeScale(0.03, 0.03, site.max_range_m)  # spacing well below the spread at any range
        node = np.rint(scale.position(np.minimum(site.range_m, site.max_range_m))).astype(np.int64)
        nothing, unsure = scale.nodes, scale.nodes + 1
        node = np.where(site.unsure, unsure, np.where(np.isfinite(site.range_m), node, nothing))
        finishes = len(site.palette) + 1
        pairs, ring = np.unique(node * finishes + site.finish + 1, return_inverse=True)
        ring = ring.reshape(node.shape).astype(np.uint16 if len(pairs) < 2**16 else np.uint32)
        node, finish = np.divmod(pairs, finishes)
        often = np.bincount(ring.ravel(), minlength=len(pairs)).astype(float)
        expected = np.where(node == nothing, np.inf, scale.range_at(np.minimum(node, scale.nodes)))
        colours = np.vstack([np.full((1, 3), np.nan), site.palette])[finish]
        layout = site.layout
        first, headings = layout.first, site.grid.headings

        def evidence(depth_m: NDArray[np.floating], rgb: NDArray[np.floating]) -> NDArray[np.floating]:
            ranges = self._ranges(depth_m, expected, site)
            table = _against_background(ranges, often * (node != unsure), node == unsure)
            table += _against_background(self._colours(rgb, colours), often, np.isnan(colours[:, 0]))
            table *= self.exponent(site) * layout.present()[:, None]
            strips_last = np.ascontiguousarray(table.transpose(1, 2, 0), dtype=np.float32)
            return _along_rings(strips_last, ring, first, layout.bearings_per_heading, headings)

        return evidence

    def _ranges(self, depth_m: NDArray, expected: NDArray, site: Site) -> NDArray[np.float64]:
        """[b w e] likelihood of each reading for each expected range, in units of its peak."""
        reach = np.isfinite(expected)
        near = np.where(reach, expected, 0.0)
        spread = np.hypot(self.spread_m + self.growth_per_m * near, site.grid.cell_m / np.sqrt(12))
        back = np.isfinite(depth_m)[..., None]
        miss = (np.nan_to_num(depth_m)[..., None] - near) / spread
        alike = np.where(back & reach, np.exp(-0.5 * miss**2), back == reach)
        return self.stray_share + (1 - self.stray_share) * alike

    def _colours(self, rgb: NDArray, colours: NDArray) -> NDArray[np.float64]:
        """[b w e] the same for colours: strays where the plan knows none, 1 where none was measured."""
        x, y = np.log(np.maximum(rgb, 0.0) + DARK), np.log(colours + DARK)
        square = ((x[..., None, :] - y) ** 2).sum(axis=-1) / self.colour_spread**2
        alike = np.nan_to_num(np.exp(-0.5 * square))
        share = self.colour_stray_share + (1 - self.colour_stray_share) * alike
        return np.where(np.isnan(x).any(axis=-1)[..., None], 1.0, share)


def _against_background(
    likelihood: NDArray[np.float64], often: NDArray[np.float64], silent: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """[b w e] nats against the mean over what the site shows; zero for classes that say nothing."""
    mean = likelihood @ (often / max(often.sum(), 1.0))
    mean[mean == 0] = 1.0  # nothing on the site says anything
    return np.where(silent, 0.0, np.log(likelihood / mean[..., None]))


@njit(cache=True, parallel=True, fastmath=True)
def _along_rings(table, ring, first, per_heading, headings):
    """out[b n h] = sum over w of table[w, ring[n, (h per_heading + first + w) mod p], b].

    Strips come last in the table, so that one look-up serves all of them.
    """
    columns, _, strips = table.shape
    cells, bearings = ring.shape
    out = np.zeros((strips, cells, headings), np.float32)
    for n in prange(cells):
        twice = np.concatenate((ring[n], ring[n]))
        total = np.empty(strips, np.float32)
        for h in range(headings):
            start = (h * per_heading + first) % bearings
            total[:] = 0
            for w in range(columns):
                entry = table[w, twice[start + w]]
                for b in range(strips):
                    total[b] += entry[b]
            for b in range(strips):
                out[b, n, h] = total[b]
    return out

"""What the plan predicts at lattice poses, what a survey saw there, which poses are near one another."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.poses import wrap
from learnfilter.render.site import Site

Indices = NDArray[np.int64]


class Looks(NamedTuple):
    """What one strip, taken at each sampled pose, leaves of a belief that knew nothing.

    Attributes:
        cell, heading: [s] sampled poses.
        weight: [s] share of all live poses that each stands for; sums to one.
        located: [s] posterior mass within 0.5 m and 15 degrees of the true pose.
        entropy: [s] nats of the posterior.
        rest: [s] posterior mass that is neither about the true pose nor about a look-alike, over that
            about the true pose.
    """

    cell: Indices
    heading: Indices
    weight: NDArray[np.float64]
    located: NDArray[np.float64]
    entropy: NDArray[np.float64]
    rest: NDArray[np.float64]


class Links(NamedTuple):
    """Look-alikes of sampled poses, one row each.

    Attributes:
        sample: [l] number of the sampled pose.
        cell, heading: [l] the pose that looks like it.
        gap_nats: [l] evidence of the true pose less that of the look-alike.
        ratio: [l] posterior mass about the look-alike over that about the true pose.
    """

    sample: Indices
    cell: Indices
    heading: Indices
    gap_nats: NDArray[np.float64]
    ratio: NDArray[np.float64]


def columns_of(site: Site, heading: Indices) -> Indices:
    """[b w] ring bearing that each strip position looks along at heading bins [b]."""
    layout = site.layout
    start = heading[:, None] * layout.bearings_per_heading + layout.first
    return (start + np.arange(layout.columns)) % layout.bearings


def predicted_strips(
    site: Site, cell: Indices, heading: Indices
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """The strips a plan predicts, without noise; doors and windows it is unsure of seen as shut.

    Args:
        site: the rendered plan.
        cell, heading: [b] live cell number and heading bin.

    Returns:
        depth_m [b w] and linear rgb [b w 3], NaN where nothing is within reach or known.
    """
    rays = cell[:, None], columns_of(site, heading)
    seen = np.isfinite(site.range_m[rays]) & site.layout.present()
    palette = np.vstack([site.palette, np.full((1, 3), np.nan, np.float32)])
    depth = np.where(seen, site.range_m[rays], np.float32(np.nan))
    return depth, np.where(seen[..., None], palette[site.finish[rays]], np.float32(np.nan))


@dataclass(frozen=True, eq=False)
class Surroundings:
    """Finds the lattice poses within a reach of a pose.

    Attributes:
        site: whose poses.
        index: [r c] live cell numbers, -1 elsewhere.
    """

    site: Site
    index: NDArray[np.int32]

    @classmethod
    def of(cls, site: Site) -> Surroundings:
        return cls(site, site.index_of())

    def within(self, cell: int, heading: int, reach_m: float, reach_rad: float) -> tuple[Indices, ...]:
        """Live cells and heading bins of the poses that near, ready to index [n h] arrays."""
        grid = self.site.grid
        row, column = self.site.cells[cell]
        k = int(reach_m / grid.cell_m + 1e-9)
        r0, c0 = max(row - k, 0), max(column - k, 0)
        block = self.index[r0 : row + k + 1, c0 : column + k + 1]
        dr, dc = np.ogrid[r0 - row : r0 - row + block.shape[0], c0 - column : c0 - column + block.shape[1]]
        cells = block[(dr**2 + dc**2 <= (reach_m / grid.cell_m) ** 2 + 1e-9) & (block >= 0)]
        centres = grid.heading_centres()
        bins = np.flatnonzero(np.abs(wrap(centres - centres[heading])) <= reach_rad + 1e-9)
        return np.ix_(cells, bins)

"""Bayes' rule over the lattice, for the cells that can matter."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import ImpossibleEvidence
from learnfilter.runtime.bundle import Bundle
from learnfilter.runtime.cells import beside, over_cells
from learnfilter.runtime.part import Floats, Part


@dataclass(frozen=True, eq=False)
class Scale:
    """What strips are weighed with: a model's features of the site, and which cells are live.

    Attributes:
        bundle: model, site and settings.
        features: of the site.
        live: [r c].
        index: [r c] of each live cell among the site's, -1 elsewhere.
    """

    bundle: Bundle
    features: Any
    live: NDArray[np.bool_]
    index: NDArray[np.int32]

    @classmethod
    def of(cls, bundle: Bundle) -> Scale:
        """For a bundle; memory for the features is claimed here."""
        site = bundle.site
        index = np.full(site.grid.shape[1:], -1, np.int32)
        index[site.cells[:, 0], site.cells[:, 1]] = np.arange(len(site.cells))
        small = bundle.manifest["precision"] == "int8"
        return cls(bundle, bundle.model.read(site, small), index >= 0, index)

    @property
    def poses(self) -> int:
        """How many live poses there are."""
        return len(self.bundle.site.cells) * self.bundle.site.grid.headings

    def nowhere(self) -> Part:
        """Every live pose alike."""
        share = np.float32(1.0 / self.poses)
        return Part(np.broadcast_to(self.live * share, self.bundle.site.grid.shape), 0, 0)

    def weigh(
        self, prior: Part, depth_m: Floats, rgb: Floats, floor: float | None = None
    ) -> tuple[Part, float]:
        """Belief conditioned on a strip, and its log evidence in nats.

        A cell is active if it or one of the eight beside it holds `skip_below` / cells of the prior: the mean
        over a cell needs those beside it.  Where at most half are, the others are left out, and believed
        in no more, if the strip's evidence over the active ones is `skip_ratio` times the prior left out:
        evidence is relative to a strip seen anywhere, so what is left out would hardly gain.  Otherwise
        every cell is weighed.

        Args:
            prior: probabilities of live poses, summing to one.
            depth_m, rgb: [w] and [w 3] on ring bearings.
            floor: share of belief spread over all live poses first; None for the bundle's.  With one
                of its own no cell is left out.

        Raises:
            ImpossibleEvidence: the model's numbers overflow, or no pose believed in explains the strip.
        """
        weighing = self.bundle.weighing
        share = weighing.floor if floor is None else floor
        if floor is None:
            least = weighing.skip_below / len(self.bundle.site.cells)
            room = prior.grown(1, 1, self.bundle.site.grid)
            active = self.live[room.window] & (beside(room.planes.sum(axis=0) >= least) > 0)
            if 0 < 2 * np.count_nonzero(active) <= len(self.bundle.site.cells):
                near = room.cropped(active)
                weights, log_evidence, held = self._weights(
                    near, depth_m, rgb, share, active[_inside(room, near)]
                )
                if log_evidence >= math.log(max(1.0 - held, 1e-30) * weighing.skip_ratio):
                    return near._replace(planes=weights), log_evidence
        rows, columns = self.live.shape
        whole = prior.grown(rows, columns, self.bundle.site.grid)
        weights, log_evidence, _ = self._weights(whole, depth_m, rgb, share, self.live)
        if not math.isfinite(log_evidence):
            raise ImpossibleEvidence(
                f"log evidence is {log_evidence}: numbers overflow, or no pose explains the strip"
            )
        return Part(weights, 0, 0), log_evidence

    def _weights(
        self, prior: Part, depth_m: Floats, rgb: Floats, floor: float, active: NDArray[np.bool_]
    ) -> tuple[Floats, float, float]:
        """Belief [h r c] over the active cells [r c] of a window, log evidence, and the prior they held."""
        every = len(self.bundle.site.cells) == np.count_nonzero(active)
        cells = slice(None) if every else self.index[prior.window][active].astype(np.int64)
        seen, peak = self.bundle.model.likelihood(depth_m, rgb, self.features, cells)
        planes = np.zeros((len(seen), active.size), np.float32)
        planes[:, np.flatnonzero(active)] = seen
        mean = over_cells(planes.reshape(-1, *active.shape), active)
        believed = (prior.planes * np.float32(1 - floor) + np.float32(floor / self.poses)) * active
        held = float(believed.sum(dtype=np.float64))
        believed *= mean
        total = float(believed.sum(dtype=np.float64))
        log_evidence = math.log(total) + peak if total > 0 and math.isfinite(total) else math.nan
        believed *= np.float32(1 / total) if total > 0 else np.float32(0)
        return believed, log_evidence, held


def _inside(outer: Part, inner: Part) -> tuple[slice, slice]:
    """The window of `inner` in rows and columns of `outer`."""
    rows, columns = inner.planes.shape[1:]
    row, column = inner.row - outer.row, inner.column - outer.column
    return slice(row, row + rows), slice(column, column + columns)

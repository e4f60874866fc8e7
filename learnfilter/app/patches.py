"""Which parts of the plan a locked robot found otherwise than drawn."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Literal, NamedTuple

import numpy as np
from scipy import ndimage, stats

from learnfilter.ablation.statistics import holm
from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.tally import PATCH, Counts

LEVEL = 0.01  # of all patches together
LEAST_NEW = 3  # strips: somebody who walks by is met in one or two
# Where nothing was measured, and where calibration met no exception: a pose is known to half a cell, so edges
# are looked past now and then.
LEAST_SHARE = 0.01


class Patch(NamedTuple):
    """A square of the plan that disagrees with the strips.

    Attributes:
        kind: 'gone' where the robot looked through what is drawn, 'new' where it met what is not.
        x_m, y_m: its centre.
        side_m: of the square.
        met, gone, new: strips that found it as drawn, looked through it, met something new in it.
        p: of so many looks through, adjusted for all patches seen; None for new things.
    """

    kind: Literal["gone", "new"]
    x_m: float
    y_m: float
    side_m: float
    met: int
    gone: int
    new: int
    p: float | None


class Area(NamedTuple):
    """Patches of a kind that touch.

    Attributes:
        patches: at least one.
    """

    patches: tuple[Patch, ...]

    @property
    def kind(self) -> Literal["gone", "new"]:
        return self.patches[0].kind

    @property
    def where(self) -> str:
        """Its extent in words."""
        half = self.patches[0].side_m / 2
        (left, right), (bottom, top) = (
            (min(values) - half, max(values) + half)
            for values in ([p.x_m for p in self.patches], [p.y_m for p in self.patches])
        )
        return f"x {left:.1f} to {right:.1f} m, y {bottom:.1f} to {top:.1f} m"

    @property
    def strongest(self) -> Patch:
        """The patch that says it loudest."""
        return max(self.patches, key=lambda patch: patch.gone if self.kind == "gone" else patch.new)

    @property
    def sentence(self) -> str:
        most = self.strongest
        if self.kind == "gone":
            times = f"up to {most.gone} of {most.gone + most.met} strips looked through it"
            return f"Not as drawn: {self.where}; {times}."
        return f"Something new: {self.where}; up to {most.new} strips met it."


def usual_share(manifest: Any, counts: Counts) -> float:
    """Share of looks through what is drawn where the plan is true: calibrated, else this drive's own."""
    if manifest["watch"] is not None:
        return max(float(manifest["watch"]["gone_share"]), LEAST_SHARE)
    seen = int(counts.gone.sum() + counts.met.sum())
    return max(float(counts.gone.sum()) / max(seen, 1), LEAST_SHARE)


def disagreeing(counts: Counts, grid: PoseGrid, share: float) -> tuple[Patch, ...]:
    """Patches that are not as drawn, then patches with something new.

    The first are looked through significantly more often than is usual on the site (exact binomial tail,
    Holm 1979 over the patches seen), the second hold something new in at least `LEAST_NEW` strips.

    Args:
        counts: of a replay.
        grid: the lattice they were counted on.
        share: of looks through what is drawn where the plan is true.
    """
    seen = counts.met + counts.gone
    p = np.ones(seen.shape)
    tail = stats.binom.sf(counts.gone - 1, seen, share)
    p[seen > 0] = holm(tail[seen > 0])
    gone = [_patch("gone", row, column, counts, grid, float(p[row, column]))
            for row, column in np.argwhere(p < LEVEL)]  # fmt: skip
    new = [_patch("new", row, column, counts, grid, None)
           for row, column in np.argwhere(counts.new >= LEAST_NEW)]  # fmt: skip
    return (*gone, *new)


def areas(patches: Sequence[Patch]) -> tuple[Area, ...]:
    """Patches of a kind that touch, corners included, as one: those not as drawn first."""
    found: list[Area] = []
    for kind in ("gone", "new"):
        own = [patch for patch in patches if patch.kind == kind]
        if not own:
            continue
        centres = np.array([[p.y_m, p.x_m] for p in own])
        at = np.rint((centres - centres.min(axis=0)) / own[0].side_m).astype(int)
        mask = np.zeros(at.max(axis=0) + 1, bool)
        mask[tuple(at.T)] = True
        labels, count = ndimage.label(mask, np.ones((3, 3)))
        label = labels[tuple(at.T)]
        found += [Area(tuple(p for p, n in zip(own, label, strict=True) if n == k + 1)) for k in range(count)]
    return tuple(found)


def _patch(
    kind: Literal["gone", "new"], row: int, column: int, counts: Counts, grid: PoseGrid, p: float | None
) -> Patch:
    side = PATCH * grid.cell_m
    x, y = grid.left_m + (column + 0.5) * side, grid.bottom_m + (row + 0.5) * side
    met, gone, new = (int(array[row, column]) for array in counts)
    return Patch(kind, float(x), float(y), side, met, gone, new, p)

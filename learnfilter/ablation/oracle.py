# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""A filter that knows the world: how much could any model gain?

It knows what stands and walks there, the light, the sensor's faults and the wheels' noise, but neither
the pose nor a single draw of noise, and filters on a lattice FINER times finer in place and heading.
Its belief is summed to the common cells before it is scored.  Share of the gap closed =
(learned - best analytic) / (oracle - best analytic).

The belief is a list of poses that matter: a few hundred of millions after one strip.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
import torch
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

from learnfilter.ablation.known import FINER, Known
from learnfilter.ablation.sensing import strip_log_likelihood
from learnfilter.ablation.surroundings import cast_world, rough_scores
from learnfilter.core.errors import ImpossibleEvidence
from learnfilter.core.grid import PoseGrid
from learnfilter.filtering.course import Scored
from learnfilter.filtering.motion import shift_weights
from learnfilter.filtering.trace import Trace, write_down

# Share of belief spread over all live poses when it is scored, as filters in the study keep one too: a
# drive on which the oracle is wrong shall not outweigh all others.
FLOOR = 1e-4
# Poses this many nats of the rough score below the best are not looked at closely.
SCREEN_NATS = 60.0
# Poses with a smaller share of the heaviest one's mass are dropped.
LEAST_SHARE = 1e-8


class Belief(NamedTuple):
    """Probability `mass` [m] of `poses` [m 3] (heading, row, column); zero elsewhere."""

    poses: NDArray[np.int64]
    mass: NDArray[np.float64]


class Common(NamedTuple):
    """The lattice that all filters are scored on.

    Attributes:
        grid: the lattice.
        live: [r c] where the plan says the robot can be.
        stands_for: [r c] flat cell in which mass of each cell counts: itself or the nearest live one.
    """

    grid: PoseGrid
    live: NDArray[np.bool_]
    stands_for: NDArray[np.int64]


def common_lattice(grid: PoseGrid, live: NDArray[np.bool_]) -> Common:
    """A lattice with its live cells [r c]."""
    row, column = ndimage.distance_transform_edt(~live, return_distances=False, return_indices=True)
    return Common(grid, live, row.astype(np.int64) * grid.columns + column)


def follow(
    known: Known, common: Common, name: str, poses: NDArray[np.float64], steps: int | None = None
) -> Trace:
    """Filter the first `steps` strips and write down what is believed on the common lattice.

    Args:
        known: what the oracle knows.
        common: where it is scored.
        name: of the drive.
        poses: [s 3] true sensor poses as they read on the plan.
        steps: at most this many strips; None for all.
    """
    grid = common.grid
    row, column = grid.cell_of(poses[:, 0], poses[:, 1])
    cell = common.stands_for[row.clip(0, grid.rows - 1), column.clip(0, grid.columns - 1)]
    scored = Scored(grid, grid.heading_of(poses[:, 2]), *np.divmod(cell, grid.columns))
    even = FLOOR * common.live / (common.live.sum() * grid.headings)
    states = beliefs(known, len(poses) if steps is None else steps)
    return write_down(((1 - FLOOR) * sum_to(state, common) + even for state in states), grid, scored, name)


def beliefs(known: Known, steps: int) -> Iterator[Belief]:
    """The belief after each of the first strips.

    Raises:
        ImpossibleEvidence: no pose explains a strip.
    """
    belief = _begin(known)
    for step in range(min(steps, len(known.motion))):
        if step > 0:
            belief = move(belief, known, step)
        belief = weigh(belief, strip_log_likelihood(known, step, belief.poses), step)
        yield belief


def weigh(belief: Belief, log_likelihood: NDArray[np.float64], step: int) -> Belief:
    """Condition on one strip's nats [m]; what no longer matters is dropped."""
    log_mass = np.log(belief.mass) + log_likelihood
    if not np.isfinite(log_mass.max(initial=-np.inf)):
        raise ImpossibleEvidence(f"no pose explains weighed strip {step}")
    mass = np.exp(log_mass - log_mass.max())
    keep = mass > LEAST_SHARE
    return Belief(belief.poses[keep], mass[keep] / mass[keep].sum())


def _leaning(cells: NDArray[np.bool_], lean: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Cells that the sensor of a robot in `cells` can be in."""
    out = np.zeros_like(cells)
    for shift in np.unique(lean, axis=0):
        out |= np.roll(cells, shift, (0, 1))
    return out


def _begin(known: Known) -> Belief:
    """Poses that the first strip does not rule out, as likely as the robot's start is."""
    rings = cast_world(known, _leaning(known.start > 0, known.lean), 0)
    rough = rough_scores(known, rings, 0)
    row, column = np.argwhere(rings.number >= 0).T
    headings = np.arange(len(known.lean))[:, None]
    rows, columns = row - known.lean[:, :1], column - known.lean[:, 1:]
    start = known.start[rows.clip(0, known.start.shape[0] - 1), columns.clip(0, known.start.shape[1] - 1)]
    rough = np.where(start > 0, rough.T, -np.inf)
    keep = rough >= rough.max() - SCREEN_NATS
    row, column, heading = (np.broadcast_to(a, keep.shape)[keep] for a in (row, column, headings))
    return Belief(np.stack([heading, row, column], axis=1), start[keep])


def sum_to(belief: Belief, common: Common) -> NDArray[np.float64]:
    """[h r c] on the common lattice; a fine heading on the border of two bins counts half in each."""
    grid = common.grid
    heading, row, column = belief.poses.T
    cell = common.stands_for[row // FINER, column // FINER]
    out = np.zeros(grid.headings * grid.rows * grid.columns)
    for bin_ in ((heading + FINER // 2 - 1) // FINER, (heading + FINER // 2) // FINER):
        at = bin_ % grid.headings * (grid.rows * grid.columns) + cell
        out += np.bincount(at, 0.5 * belief.mass, len(out))
    return out.reshape(grid.shape)


def move(belief: Belief, known: Known, step: int) -> Belief:
    """Carry the belief through the motion before a step: shift under the old heading, then turn.

    Mass that would come to stand where the robot cannot, or on its straight way pass what it cannot,
    is lost, and the rest is scaled up.
    """
    grid = known.grid
    (forward, left, turn), (travel_sd, turn_sd) = known.motion[step], known.spread[step]
    cos, sin = np.cos(grid.heading_centres()), np.sin(grid.heading_centres())
    ahead = (forward * sin + left * cos) / grid.cell_m, (forward * cos - left * sin) / grid.cell_m
    variance = (travel_sd / grid.cell_m) ** 2
    rows, columns = (_taps(mean, variance) for mean in ahead)
    (first, turns) = _taps(np.array([turn / grid.heading_step_rad]), (turn_sd / grid.heading_step_rad) ** 2)
    out = np.zeros(grid.shape)
    _scatter(
        belief.poses, belief.mass, *ahead, *rows, *columns, int(first[0]), turns[0], known.standing,
        known.passable, known.lean, out,
    )  # fmt: skip
    poses = np.argwhere(out > LEAST_SHARE * out.max())
    mass = out[tuple(poses.T)]
    return Belief(poses, mass / mass.sum())


def _taps(mean: NDArray[np.float64], variance: float) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """First offset [k] and weights [k j] of shifts by `mean` [k] cells."""
    reach = 1 + math.ceil(4 * math.sqrt(variance))
    first = np.rint(mean).astype(np.int64) - reach
    offsets = first[:, None] + np.arange(2 * reach + 1)
    spread = torch.full((len(mean),), variance, dtype=torch.float64)
    weights = shift_weights(torch.from_numpy(mean), spread, torch.from_numpy(offsets).double()).numpy()
    return first, weights.clip(min=0)


@njit(cache=True)
def _clear(row, column, by_row, by_column, passable):
    """Whether the straight way from a cell stays where the robot can pass."""
    longest = int(max(abs(by_row), abs(by_column)))
    for i in range(1, longest + 1):
        r, c = row + int(np.rint(by_row * i / longest)), column + int(np.rint(by_column * i / longest))
        if not (0 <= r < passable.shape[0] and 0 <= c < passable.shape[1] and passable[r, c]):
            return False
    return True


@njit(cache=True)
def _scatter(
    poses, mass, by_row, by_column, first_r, weight_r, first_c, weight_c, first_h, weight_h, standing,
    passable, lean, out,
):  # fmt: skip
    """Add each pose's mass to where the robot may come to stand."""
    headings, rows, columns = out.shape
    for m in range(len(poses)):
        h, r, c = poses[m]
        if not _clear(r - lean[h, 0], c - lean[h, 1], by_row[h], by_column[h], passable):
            continue
        for t in range(len(weight_h)):
            after = (h + first_h + t) % headings
            if weight_h[t] * mass[m] < 1e-14:
                continue
            for i in range(weight_r.shape[1]):
                row = r + first_r[h] + i
                part = mass[m] * weight_h[t] * weight_r[h, i]
                if part < 1e-14 or not 0 <= row < rows:
                    continue
                for j in range(weight_c.shape[1]):
                    column = c + first_c[h] + j
                    if 0 <= column < columns:
                        y, x = row - lean[after, 0], column - lean[after, 1]
                        if 0 <= y < rows and 0 <= x < columns and standing[y, x]:
                            out[after, row, column] += part * weight_c[h, j]

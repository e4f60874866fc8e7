"""Run a filter along drives: which rows are weighed, and the belief after each."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.poses import compose, through_mount
from learnfilter.core.strip import RingLayout
from learnfilter.drives.drive import Drive
from learnfilter.filtering.grid_filter import FilterState, over_cells, weigh
from learnfilter.filtering.motion import Lattice, MotionModel, predict
from learnfilter.observe.contract import Strips


class Steps(NamedTuple):
    """A drive cut to its weighed strips.

    Attributes:
        rows: [s] row of the drive each step weighs.
        odometry: [s 3] sensor motion since the previous weighed strip (zeros in the first).
        strips: the weighed strips, laid on the ring.
    """

    rows: NDArray[np.int64]
    odometry: Tensor
    strips: Strips


def weighed_steps(drive: Drive, layout: RingLayout, after_m: float, after_rad: float) -> Steps:
    """Pick the strips that are weighed: the first, then each after enough travel or turning.

    A parked robot sees the same surprise again and again; counting it each time would be wrong, so a
    strip is weighed only once the robot has travelled `after_m` or turned `after_rad` in all since
    the last one that was.
    """
    motions = through_mount(drive.odometry, np.asarray(drive.strip.mount))
    rows, odometry = [0], [np.zeros(3)]
    pending, travel, turn = np.zeros(3), 0.0, 0.0
    for row in range(1, len(drive)):
        pending = compose(pending, motions[row])
        travel += float(np.hypot(*motions[row, :2]))
        turn += abs(float(motions[row, 2]))
        if travel >= after_m or turn >= after_rad:
            rows.append(row)
            odometry.append(pending)
            pending, travel, turn = np.zeros(3), 0.0, 0.0
    index = np.array(rows)
    return Steps(
        index, torch.tensor(np.array(odometry), dtype=torch.float32), lay_strips(drive, layout, index)
    )


def lay_strips(drive: Drive, layout: RingLayout, rows: NDArray[np.int64]) -> Strips:
    """Some rows of a drive as strips on ring bearings, colour made linear."""
    depth = layout.lay(drive.depth_m[rows])
    if drive.rgb is None:
        rgb = np.full((*depth.shape, 3), np.nan)
    else:
        rgb = layout.lay(srgb_to_linear(drive.rgb[rows]), axis=1)
    return Strips(
        torch.tensor(depth, dtype=torch.float32),
        torch.tensor(rgb, dtype=torch.float32),
        torch.tensor(layout.present()),
    )


def rollout(
    state: FilterState,
    odometry: Tensor,
    log_likelihood: Callable[[int], Tensor],
    lattice: Lattice,
    motion: MotionModel,
    floor: float,
) -> Iterator[FilterState]:
    """Yield the state after each step of a batch of equally long drives on one site.

    Args:
        state: the belief to begin with.
        odometry: [s b 3]; the first is not applied, the drive begins there.
        log_likelihood: step -> [b n h] at the centres of live cells.
        lattice, motion, floor: see `weigh` and `predict`.
    """
    for step in range(len(odometry)):
        if step > 0:
            belief, _ = predict(state.belief, odometry[step], lattice, motion)
            state = FilterState(belief, state.log_evidence)
        state = weigh(state, over_cells(log_likelihood(step), lattice), lattice, floor)
        yield state

"""What each place that the robot may be at predicts it will see after each motion.

The plan is looked up, not cast anew: a pose takes the ring of its cell, turned to the nearest ring
bearing; off the live cells, that of the nearest live cell within NEAREST.  Views are pooled to a few
sectors, so that their size depends neither on the map nor on the sensor.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.estimate import Mode
from learnfilter.core.poses import between, compose
from learnfilter.runtime.site import RobotSite

Floats = NDArray[np.float32]

MODES = 6  # told apart; look-alike places beyond the sixth weigh little
SECTORS = 8
CHANNELS = 4  # of a sector: range, red, green, blue
VIEW = CHANNELS * SECTORS
NEAREST = 2  # cells that a pose off the live cells may be away from the live cell that stands for it
MARGIN = NEAREST + 1  # cells around the lattice, the outermost of which no live cell stands for


class Outlook(NamedTuple):
    """A belief as a few places, and what they promise; sizes do not depend on the map.

    A view has CHANNELS times SECTORS numbers: the mean of min(range, max) / max over each of SECTORS equal
    groups of columns, which is above zero, then of linear red, green and blue; zero where nothing is known.

    Attributes:
        share: [k] belief near each mode, heaviest first; zero in rows beyond the last mode.
        place: [k 4] of each, seen from the heaviest: forward_m, left_m, cosine and sine of the turn.
        view: [k m 32] the plan's view from each mode after each motion.
        seen: [32] the measured view.
        entropy: of the belief, as a share of that of knowing nothing.
    """

    share: Floats
    place: Floats
    view: Floats
    seen: Floats
    entropy: float


def look_out(
    modes: Sequence[Mode],
    motions: NDArray[np.floating],
    site: RobotSite,
    near: NDArray[np.int32],
    depth_m: Floats,
    rgb: Floats | None,
    entropy: float,
    max_range_m: float,
) -> Outlook:
    """The outlook of a belief.

    Args:
        modes: of the sensor's pose at the strip, heaviest first; those beyond MODES are left out.
        motions: [m 3] of the sensor, to be looked ahead at.
        site: the plan.
        near: from `stand_ins`.
        depth_m, rgb: [w] and [w 3], linear, the strip on ring bearings, NaN where there is nothing; None
            for a sensor without colour, which the views are then without too.
        entropy: of the belief, nats.
        max_range_m: of the sensor.
    """
    count = min(len(modes), MODES)
    poses = np.array([mode.pose for mode in modes[:count]])
    share, place = np.zeros(MODES, np.float32), np.zeros((MODES, 4), np.float32)
    share[:count] = [mode.mass for mode in modes[:count]]
    away = between(poses[0], poses)
    place[:count, :2] = away[:, :2]
    place[:count, 2], place[:count, 3] = np.cos(away[:, 2]), np.sin(away[:, 2])
    view = np.zeros((MODES, len(motions), VIEW), np.float32)
    range_m, colour = expect(poses, motions, site, near)
    view[:count] = pooled(range_m, None if rgb is None else colour, max_range_m)
    seen = pooled(depth_m, rgb, max_range_m)
    return Outlook(share, place, view, seen, entropy / math.log(len(site.cells) * site.grid.headings))


def expect(
    poses: NDArray[np.floating], motions: NDArray[np.floating], site: RobotSite, near: NDArray[np.int32]
) -> tuple[Floats, Floats]:
    """What the plan says the sensor sees after motions.

    Where no live cell is near the end of a motion, the sensor is taken not to have moved.

    Args:
        poses: [k 3] of the sensor.
        motions: [m 3] of the sensor.
        site: the plan.
        near: from `stand_ins`.

    Returns:
        Range [k m w] on the strip's ring bearings, inf where nothing is within reach, and linear colour
        [k m w 3]; NaN where the plan does not know or no column looks.
    """
    layout = site.layout
    moved = compose(poses[:, None], np.concatenate([motions, np.zeros((1, 3))]))
    row, column = site.grid.cell_of(moved[..., 0], moved[..., 1])
    highest = np.array(near.shape) - 1
    cells = near[(row + MARGIN).clip(0, highest[0]), (column + MARGIN).clip(0, highest[1])]
    reached = cells[:, :-1] >= 0
    heading = np.where(reached, moved[:, :-1, 2], moved[:, -1:, 2])
    cells = np.where(reached, cells[:, :-1], cells[:, -1:])[..., None]
    turned = np.rint(heading * (1 / layout.step_rad)).astype(np.int64)[..., None]
    ring = (turned + (layout.first + np.arange(layout.columns))) % layout.bearings
    ring += cells * layout.bearings
    looked = (cells >= 0) & layout.present()
    sure = looked & ~site.unsure.reshape(-1)[ring]
    range_m = np.where(sure, site.range_m.reshape(-1)[ring], np.float32(np.nan))
    palette = np.concatenate([site.palette, np.full((1, 3), np.nan, np.float32)])  # the last is unknown, -1
    return range_m, palette[np.where(looked, site.finish.reshape(-1)[ring], -1)]


def stand_ins(index: NDArray[np.int32]) -> NDArray[np.int32]:
    """The live cell that stands for every cell: itself, else the nearest within NEAREST cells.

    Args:
        index: [r c] of each live cell among the site's, -1 elsewhere.

    Returns:
        [r + 2 MARGIN, c + 2 MARGIN], the lattice with cells around it; -1 where no live cell is near.
    """
    rows, columns = index.shape
    near = np.full((rows + 2 * MARGIN, columns + 2 * MARGIN), -1, np.int32)
    steps = range(-NEAREST, NEAREST + 1)
    offsets = sorted(((r, c) for r in steps for c in steps), key=lambda at: -(at[0] ** 2 + at[1] ** 2))
    for r, c in offsets:  # the nearest comes last and stays
        around = near[MARGIN + r : MARGIN + r + rows, MARGIN + c : MARGIN + c + columns]
        np.copyto(around, index, where=index >= 0)
    return near


def pooled(range_m: Floats, colour: Floats | None, max_range_m: float) -> Floats:
    """[... 32] view of ranges [... w] and colours [... w 3], NaN where nothing is known; see `Outlook`."""
    width = range_m.shape[-1]
    columns = np.zeros((*range_m.shape[:-1], CHANNELS, width), np.float32)
    np.minimum(range_m * np.float32(1 / max_range_m), 1, out=columns[..., 0, :])
    if colour is not None:
        columns[..., 1:, :] = np.swapaxes(colour, -1, -2)
    known = ~np.isnan(columns)
    columns[~known] = 0
    sector = np.arange(width) * SECTORS // width
    member = (sector[:, None] == np.arange(SECTORS)).astype(np.float32)
    total = columns.reshape(-1, width) @ member
    count = known.reshape(-1, width).astype(np.float32) @ member
    total /= np.maximum(count, 1)
    return total.reshape(*range_m.shape[:-1], VIEW)

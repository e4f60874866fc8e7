"""Hold the runtime to the filter it was exported from: total variation between their beliefs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from learnfilter.drives.drive import Drive
from learnfilter.export.reference import Filter, filtered
from learnfilter.export.vectors import inputs
from learnfilter.runtime.bundle import VECTORS, load_bundle
from learnfilter.runtime.localizer import Localizer


def total_variation(belief: NDArray[np.floating], expected: NDArray[np.floating]) -> float:
    """Half the summed difference of two beliefs, in [0, 1]."""
    return float(np.abs(belief.astype(np.float64) - expected).sum() / 2)


def compare(folder: str | Path) -> float:
    """Replay a bundle's vectors through the runtime.

    Of steps of which the vectors hold only the heaviest poses, those count one by one and all the rest as
    one; whole beliefs count pose by pose.

    Returns:
        The worst total variation of any weighed step; infinite where other strips were weighed.

    Raises:
        BundleError: the bundle cannot be read.
    """
    localizer = Localizer(load_bundle(folder))
    with np.load(Path(folder) / VECTORS, allow_pickle=False) as file:
        vectors = dict(file)
    whole = dict(zip(vectors["belief_step"].tolist(), vectors["belief"], strict=True))
    worst, step = 0.0, 0
    for row, given in enumerate(inputs(vectors)):
        if localizer.step(**given).weighed != vectors["weighed"][row]:
            return float("inf")
        if not vectors["weighed"][row]:
            continue
        expected = vectors["top_belief"][step].astype(np.float64)
        found = localizer.belief.ravel()[vectors["top_pose"][step]].astype(np.float64)
        rest = np.array([1 - found.sum()]), np.array([1 - expected.sum()])
        apart = total_variation(np.append(found, rest[0]), np.append(expected, rest[1]))
        if step in whole:
            apart = max(apart, total_variation(localizer.belief, whole[step]))
        worst, step = max(worst, apart), step + 1
    return worst


def against_torch(
    folder: str | Path, filter_: Filter, drive: Drive, steps: int | None = None
) -> NDArray[np.float64]:
    """Run the runtime and torch side by side over a drive.

    Args:
        folder: the bundle.
        filter_: what it was exported from.
        drive: what the robot measures.
        steps: at most this many weighed strips.

    Returns:
        [s] total variation between the whole beliefs after each weighed strip.

    Raises:
        BundleError: the bundle cannot be read.
    """
    localizer = Localizer(load_bundle(folder))
    apart, row = [], 0
    for expected in filtered(filter_, drive, steps):
        while row <= expected.row:
            rgb = None if drive.rgb is None else drive.rgb[row]
            estimate = localizer.step(drive.odometry[row], drive.depth_m[row], rgb, drive.time_s[row])
            row += 1
        apart.append(total_variation(localizer.belief, expected.belief) if estimate.weighed else np.inf)
    return np.array(apart)

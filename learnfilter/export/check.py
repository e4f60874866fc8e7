"""Hold the runtime to the filter it was exported from: total variation between their beliefs."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from safetensors.numpy import load_file

from learnfilter.drives.drive import Drive
from learnfilter.export.precision import restored
from learnfilter.export.reference import STATES, Filter, filtered
from learnfilter.export.rings import as_shipped
from learnfilter.export.robot import with_arrays
from learnfilter.export.vectors import inputs
from learnfilter.runtime.bundle import VECTORS, WEIGHTS, Bundle, load_bundle
from learnfilter.runtime.estimate import Estimate
from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.site import reads_field


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
    vectors, found = read_vectors(folder), reproduced(folder)
    if (found["weighed"] != vectors["weighed"]).any():
        return float("inf")
    heaviest = (_with_the_rest(given["top_belief"]) for given in (found, vectors))
    whole = (given["belief"] for given in (found, vectors))
    return max(total_variation(*pair) for both in (heaviest, whole) for pair in zip(*both, strict=True))


def reproduced(folder: str | Path) -> dict[str, NDArray[Any]]:
    """What the runtime gives for a bundle's vectors: the fields of `verify.FIELDS`, shaped like the vectors'.

    Raises:
        BundleError: the bundle cannot be read.
    """
    localizer, vectors = Localizer(load_bundle(folder)), read_vectors(folder)
    steps = iter(vectors["top_pose"])
    answers: list[Estimate] = []
    top: list[NDArray[np.float32]] = []
    whole: list[NDArray[np.float32]] = []
    for given, weighed in zip(inputs(vectors), vectors["weighed"], strict=True):
        answers.append(localizer.step(**given))
        if weighed:
            belief = localizer.belief
            if len(top) in vectors["belief_step"]:
                whole.append(belief)
            top.append(belief.ravel()[next(steps)])
    told = ("weighed", "pose", "covariance", "mass", "entropy", "log_evidence", "surprise")
    return {
        **{name: np.array([getattr(answer, name) for answer in answers]) for name in told},
        "state": np.array([STATES.index(answer.state) for answer in answers], np.uint8),
        "top_belief": np.stack(top),
        "belief": np.stack(whole),
    }


def read_vectors(folder: str | Path) -> dict[str, NDArray[Any]]:
    """The arrays of a checked bundle's `vectors.npz`."""
    with np.load(Path(folder) / VECTORS, allow_pickle=False) as file:
        return dict(file)


def _with_the_rest(top: NDArray[np.floating]) -> NDArray[np.float64]:
    """[s k + 1] belief in the heaviest poses [s k], and in all others together."""
    top = top.astype(np.float64)
    return np.hstack([top, 1 - top.sum(axis=1, keepdims=True)])


def against_torch(
    folder: str | Path, filter_: Filter, drive: Drive, steps: int | None = None
) -> NDArray[np.float64]:
    """Run the runtime and torch side by side over a drive.

    Args:
        folder: the bundle.
        filter_: what it was exported from; torch runs it with the bundle's numbers.
        drive: what the robot measures.
        steps: at most this many weighed strips.

    Returns:
        [s] total variation between the whole beliefs after each weighed strip.

    Raises:
        BundleError: the bundle cannot be read.
    """
    bundle = load_bundle(folder)
    localizer = Localizer(bundle)
    apart, row = [], 0
    for expected in filtered(with_numbers_of(bundle, filter_), drive, steps, bundle.watch):
        while row <= expected.row:
            rgb = None if drive.rgb is None else drive.rgb[row]
            estimate = localizer.step(drive.odometry[row], drive.depth_m[row], rgb, drive.time_s[row])
            row += 1
        apart.append(total_variation(localizer.belief, expected.belief) if estimate.weighed else np.inf)
    return np.array(apart)


def with_numbers_of(bundle: Bundle, filter_: Filter) -> Filter:
    """A filter with the weights and rings of the bundle that was made from it, rounded as they are."""
    weights = restored(load_file(bundle.folder / WEIGHTS))
    with_field = reads_field(bundle.manifest["model"])
    return filter_._replace(
        model=with_arrays(filter_.model, weights),
        site=as_shipped(filter_.site, with_field, bundle.manifest["precision"]),
    )

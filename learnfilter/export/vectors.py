"""`vectors.npz`: inputs and expected outputs of whole filter steps, for whoever ports the filter.

Inputs, one row a strip in the sensor's raw column order: `time_s` [t], `odometry` [t 3], `depth_m` [t w],
`rgb` [t w 3] (absent without colour).  Expected, from torch, at every row: `weighed` [t], `pose` [t 3] and
`covariance` [t 3 3] of the robot's base, `mass` [t], `entropy` [t] and `log_evidence` [t] in nats, `state`
[t] (0 searching, 1 locked, 2 lost), `surprise` [t] (NaN without a watch), all as `runtime/estimate.py` says.
Of the belief after each weighed strip its heaviest poses, `top_pose` [s k] (flat index into heading, row,
column) and `top_belief` [s k]; whole, `belief` [i h r c] after the weighed strips numbered `belief_step` [i].
Some columns are missing in every fourth strip, and in one weighed strip all.  After two thirds of the steps
the robot is carried off while it is switched on: the next row has no odometry and comes from elsewhere.
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.drives.drive import Drive
from learnfilter.export.reference import Filter, estimates, filtered
from learnfilter.filtering.rollout import weighed_steps
from learnfilter.runtime.watch import Watch

LEAST_STEPS = 50
MOST_STEPS = 75  # more would only make the file larger
TOP = 256  # poses a step: nearly all of a settled belief, and a step of 2 kB


def make_vectors(
    filter_: Filter, drives: Sequence[Drive], watch: Watch | None = None
) -> dict[str, NDArray[Any]]:
    """Run the filter over a drive and write down what went in and what must come out.

    Whole is one belief, after the second weighed strip: evidence and motion have touched every pose and few
    are ruled out.  It compresses badly and is a fifth of what a bundle may weigh, so there is no other.

    Args:
        filter_: with the very numbers that are shipped.
        drives: two on its site; the robot is carried from the first to the second.
        watch: of the bundle.

    Raises:
        DriveError: fewer than LEAST_STEPS strips would be weighed, the first two thirds on the first drive.
    """
    first, second = (replace(drive, strip=filter_.strip) for drive in drives)
    before = _weighed(filter_, first)[: 2 * MOST_STEPS // 3]
    after = _weighed(filter_, second)[: len(before) // 2]
    if len(before) + len(after) <= LEAST_STEPS:  # the first after the jump is not weighed: wheels stood still
        expected, got = f"more than {LEAST_STEPS} weighed strips", len(before) + len(after)
        raise DriveError("too short for test vectors", file=first.name, expected=expected, got=got)
    drive = carried_off(first.part(0, before[-1] + 1), second.part(0, after[-1] + 1))
    rows = _weighed(filter_, drive)
    drive = with_gaps(drive, int(rows[len(rows) // 2]))
    steps = list(filtered(filter_, drive, len(rows), watch))
    top = np.stack([np.argsort(-step.belief, axis=None, kind="stable")[:TOP] for step in steps])
    whole = np.array([1])
    given: dict[str, NDArray[Any]] = {
        "time_s": drive.time_s,
        "odometry": drive.odometry,
        "depth_m": drive.depth_m,
    }
    if drive.rgb is not None:
        given["rgb"] = drive.rgb
    count = steps[-1].row + 1
    return {
        **{name: values[:count] for name, values in given.items()},
        **estimates(filter_, drive, steps),
        "top_pose": top.astype(np.int32),
        "top_belief": np.stack([step.belief.ravel()[poses] for step, poses in zip(steps, top, strict=True)]),
        "belief": np.stack([steps[step].belief for step in whole]),
        "belief_step": whole,
    }


def carried_off(first: Drive, second: Drive) -> Drive:
    """One drive after the other, as the robot's wheels saw it: not at all."""
    pause_s = np.diff(second.time_s).mean()  # as between other rows
    later_s = second.time_s - second.time_s[0] + first.time_s[-1] + pause_s
    return replace(
        first,
        time_s=np.append(first.time_s, later_s),
        odometry=np.vstack([first.odometry, second.odometry]),
        depth_m=np.vstack([first.depth_m, second.depth_m]),
        rgb=None if first.rgb is None or second.rgb is None else np.vstack([first.rgb, second.rgb]),
        reference=None,
    )


def _weighed(filter_: Filter, drive: Drive) -> NDArray[np.int64]:
    """Rows of a drive that are weighed."""
    weighing = filter_.weighing
    return weighed_steps(drive, filter_.site.layout, weighing.after_m, weighing.after_rad).rows


def with_gaps(drive: Drive, blank: int) -> Drive:
    """The drive with a moving third of the columns missing in every fourth row, and all in row `blank`."""
    rows, columns = np.arange(len(drive))[:, None], np.arange(drive.strip.columns)
    missing = (rows % 4 == 1) & ((columns + rows) % drive.strip.columns < drive.strip.columns // 3)
    missing |= rows == blank
    return replace(
        drive,
        depth_m=np.where(missing, np.float32(np.nan), drive.depth_m),
        rgb=None if drive.rgb is None else np.where(missing[..., None], np.float32(np.nan), drive.rgb),
    )


def inputs(vectors: Mapping[str, NDArray[Any]]) -> Iterator[dict[str, Any]]:
    """What to hand to the runtime's `step`, row by row."""
    names = [name for name in ("time_s", "odometry", "depth_m", "rgb") if name in vectors]
    return ({name: vectors[name][row] for name in names} for row in range(len(vectors["time_s"])))


def to_bytes(vectors: Mapping[str, NDArray[Any]]) -> bytes:
    """The file's content; the same vectors give the same bytes."""
    buffer = io.BytesIO()
    np.savez_compressed(buffer, **vectors)  # type: ignore[arg-type]
    return buffer.getvalue()

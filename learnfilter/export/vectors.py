"""`vectors.npz`: inputs and expected outputs of whole filter steps, for whoever ports the filter.

Inputs, one row a strip in the sensor's raw column order: `time_s` [t], `odometry` [t 3], `depth_m` [t w],
`rgb` [t w 3] (absent without colour).  Expected, from torch: see `reference.estimates`, and of the belief
after each weighed strip its heaviest poses, `top_pose` [s k] (flat index into heading, row, column) and
`top_belief` [s k]; whole, `belief` [i h r c] after the weighed strips numbered `belief_step` [i].
Some columns are missing in every fourth strip, and in one weighed strip all.
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.drives.drive import Drive
from learnfilter.export.reference import Filter, estimates, filtered
from learnfilter.filtering.rollout import weighed_steps

LEAST_STEPS = 50
MOST_STEPS = 100  # more would only make the file larger
TOP = 256  # poses a step: nearly all of a settled belief, and a step of 2 kB
WHOLE = 4  # whole beliefs, evenly over the steps


def make_vectors(filter_: Filter, drive: Drive) -> dict[str, NDArray[Any]]:
    """Run the filter over a drive and write down what went in and what must come out.

    Raises:
        DriveError: fewer than LEAST_STEPS strips would be weighed.
    """
    weighing = filter_.weighing
    rows = weighed_steps(drive, filter_.site.layout, weighing.after_m, weighing.after_rad).rows[:MOST_STEPS]
    if len(rows) < LEAST_STEPS:
        expected = f"at least {LEAST_STEPS} weighed strips"
        raise DriveError("too short for test vectors", file=drive.name, expected=expected, got=len(rows))
    drive = with_gaps(drive, int(rows[len(rows) // 2]))
    steps = list(filtered(filter_, drive, len(rows)))
    top = np.stack([np.argsort(-step.belief, axis=None, kind="stable")[:TOP] for step in steps])
    whole = np.unique(np.linspace(0, len(steps) - 1, WHOLE).astype(int))
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

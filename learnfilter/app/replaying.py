"""Run a bundle over a recorded drive, strip by strip, as the robot would."""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from learnfilter.app.episodes import LOCKED, ROW, STATES, Lost, Moment, Rows, episodes
from learnfilter.app.patches import Patch, disagreeing, usual_share
from learnfilter.core.errors import DriveError, StepError
from learnfilter.core.files import whole_file
from learnfilter.drives.drive import Drive
from learnfilter.drives.metrics import located
from learnfilter.runtime import Bundle, Estimate, Localizer, propose
from learnfilter.runtime.moves import Motion

SCHEMA = pa.schema(
    [
        ("time_s", pa.float64()),
        ("x_m", pa.float64()),
        ("y_m", pa.float64()),
        ("heading_rad", pa.float64()),
        ("covariance", pa.list_(pa.float64(), 9)),  # row by row: x_m, y_m, heading_rad
        ("mass", pa.float64()),
        ("entropy_nats", pa.float64()),
        ("log_evidence_nats", pa.float64()),
        ("surprise", pa.float64()),
        ("state", pa.string()),
        ("weighed", pa.bool_()),
        ("alarm", pa.bool_()),
        ("move", pa.list_(pa.float64(), 3)),  # forward_m, left_m, turn_rad proposed; null without a mover
    ],
    metadata={"learnfilter": '{"schema": 2, "table": "estimates"}'},
)


@dataclass(frozen=True, eq=False)
class Replayed:
    """What is left of a replay; small beside the drive.

    Attributes:
        rows: [t] of `episodes.ROW`.
        episodes: what happened.
        patches: where the plan disagrees with what a locked robot saw.
        milliseconds: mean wall time of a weighed strip.
        depth_only: whether colour was to be weighed and the drive has none.
    """

    rows: Rows
    episodes: tuple[Moment, ...]
    patches: tuple[Patch, ...]
    milliseconds: float
    depth_only: bool

    @property
    def lost(self) -> int:
        """How many times the search began anew."""
        return sum(isinstance(episode, Lost) for episode in self.episodes)

    def summary(self) -> dict[str, Any]:
        """Where it locked, how near it was, what happened and what disagrees, for JSON."""
        rows = self.rows
        locked, right = rows["state"] == LOCKED, located(rows["pose"], rows["reference"])
        first, known = int(np.argmax(locked)) if locked.any() else None, np.isfinite(right)
        return {
            "rows": len(rows),
            "locked_at_row": first,
            "strips_until_lock": None if first is None else int(rows["weighed"][: first + 1].sum()),
            "metres_until_lock": None if first is None else float(rows["travelled_m"][first]),
            "locked_rows": int(locked.sum()),
            "locked_share": float(locked.mean()),
            "rows_with_reference": int(known.sum()),
            "located_share": _mean(right[known]),
            "located_share_while_locked": _mean(right[known & locked]),
            "lost": self.lost,
            "milliseconds_a_strip": self.milliseconds,
            "episodes": [episode.plain() for episode in self.episodes],
            "patches": [patch._asdict() for patch in self.patches],
        }


def _mean(values: np.ndarray) -> float | None:
    return float(values.mean()) if len(values) else None


def replay_bundle(bundle: Bundle, batches: Iterable[Drive], table: Path) -> Replayed:
    """Step a bundle's filter through a drive, writing one estimate a row as it goes.

    Args:
        bundle: as loaded.
        batches: the drive in pieces, so that it may be longer than memory; nothing of them is kept.
        table: Parquet file of estimates, written whole or not at all.

    Raises:
        DriveError: the drive's strips do not fit the bundle's sensor, or a row cannot be used.
    """
    localizer, colour = Localizer(bundle), bundle.strip.has_colour
    parts, done, seconds, travelled, depth_only = [], 0, 0.0, 0.0, False
    with whole_file(table) as beside, pq.ParquetWriter(beside, SCHEMA) as writer:
        for drive in batches:
            _check_fits(drive, bundle.strip.columns)
            depth_only |= colour and drive.rgb is None
            estimates, kept = [], np.zeros(len(drive), ROW)
            for row in range(len(drive)):
                clock = time.perf_counter()
                estimate = _step(localizer, drive, row, colour, done + row)
                seconds += (time.perf_counter() - clock) * estimate.weighed
                estimates.append(
                    {**_table_row(estimate, float(drive.time_s[row])), "move": _move(localizer, drive, row)}
                )
                if done + row > 0:  # the first odometry is of no effect
                    travelled += float(np.hypot(*drive.odometry[row, :2]))
                kept[row] = _kept_row(estimate, drive, row, travelled)
            writer.write_table(pa.Table.from_pylist(estimates, SCHEMA))
            parts.append(kept)
            done += len(kept)
    rows, share = np.concatenate(parts), usual_share(bundle.manifest, localizer.counts)
    return Replayed(
        rows,
        episodes(rows, estimate.modes),
        disagreeing(localizer.counts, bundle.site.grid, share),
        1e3 * seconds / int(rows["weighed"].sum()),
        depth_only,
    )


def _check_fits(drive: Drive, columns: int) -> None:
    if drive.strip.columns != columns:
        raise DriveError(
            "strips do not fit the bundle", file=drive.name, place="depth_m",
            expected=f"{columns} columns", got=drive.strip.columns,
        )  # fmt: skip


def _step(localizer: Localizer, drive: Drive, row: int, colour: bool, number: int) -> Estimate:
    rgb = drive.rgb[row] if drive.rgb is not None and colour else None
    try:
        return localizer.step(drive.odometry[row], drive.depth_m[row], rgb, float(drive.time_s[row]))
    except StepError as error:
        place = f"row {number}, {error.place}"
        raise DriveError(
            error.message, file=drive.name, place=place, expected=error.expected, got=error.got
        ) from error


def _move(localizer: Localizer, drive: Drive, row: int) -> Motion | None:
    """Where the bundle's mover would go next, after the motion that was driven; None without a mover."""
    if localizer.bundle.mover is None:
        return None
    return propose(localizer, drive.depth_m[row], Motion(*map(float, drive.odometry[row])))


def _table_row(estimate: Estimate, time_s: float) -> dict[str, Any]:
    x, y, heading = map(float, estimate.pose)
    return {
        "time_s": time_s,
        "x_m": x,
        "y_m": y,
        "heading_rad": heading,
        "covariance": estimate.covariance.ravel().tolist(),
        "mass": estimate.mass,
        "entropy_nats": estimate.entropy,
        "log_evidence_nats": estimate.log_evidence,
        "surprise": estimate.surprise,
        "state": estimate.state,
        "weighed": bool(estimate.weighed),
        "alarm": bool(estimate.alarm),
    }


def _kept_row(estimate: Estimate, drive: Drive, row: int, travelled: float) -> tuple[Any, ...]:
    reference = np.full(3, np.nan) if drive.reference is None else drive.reference[row]
    return (
        drive.time_s[row], travelled, estimate.pose, estimate.mass, estimate.entropy, estimate.surprise,
        STATES.index(estimate.state), estimate.weighed, estimate.alarm, reference,
    )  # fmt: skip

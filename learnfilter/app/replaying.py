"""Run a bundle over a recorded drive, strip by strip, as the robot would."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.core.files import whole_file
from learnfilter.core.grid import PoseGrid
from learnfilter.drives.drive import Drive
from learnfilter.drives.metrics import located
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.report import draw_replay
from learnfilter.runtime import Bundle, Localizer
from learnfilter.runtime.site import RobotSite

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
        ("state", pa.string()),
        ("weighed", pa.bool_()),
    ],
    metadata={"learnfilter": '{"schema": 1, "table": "estimates"}'},
)


class Replayed(NamedTuple):
    """What a replay needs to be drawn and summed up; small beside the drive.

    Attributes:
        pose: [t 3] estimated pose of the robot.
        entropy: [t] nats.
        locked: [t] bool.
        reference: [t 3] of the drive, NaN where unknown.
    """

    pose: NDArray[np.float64]
    entropy: NDArray[np.float64]
    locked: NDArray[np.bool_]
    reference: NDArray[np.float64]

    def summary(self) -> dict[str, Any]:
        """Where it locked and how near it was."""
        first = int(np.argmax(self.locked)) if self.locked.any() else None
        right = located(self.pose, self.reference)
        known = np.isfinite(right)
        return {
            "rows": len(self.pose),
            "locked_at_row": first,
            "locked_rows": int(self.locked.sum()),
            "rows_with_reference": int(known.sum()),
            "located_share": float(right[known].mean()) if known.any() else None,
            "located_share_while_locked": float(right[known & self.locked].mean())
            if (known & self.locked).any()
            else None,
        }


def replay_bundle(bundle: Bundle, batches: Iterable[Drive], table: Path) -> Replayed:
    """Step a bundle's filter through a drive, writing one estimate a row as it goes.

    Args:
        bundle: as loaded.
        batches: the drive in pieces, so that it may be longer than memory.
        table: Parquet file of estimates, written whole or not at all.

    Raises:
        DriveError: the drive's strips do not fit the bundle's sensor.
    """
    localizer = Localizer(bundle)
    parts: list[tuple] = []
    with whole_file(table) as beside, pq.ParquetWriter(beside, SCHEMA) as writer:
        for drive in batches:
            _check_fits(drive, bundle.strip.columns)
            rows = [_row(localizer, drive, i, bundle.strip.has_colour) for i in range(len(drive))]
            writer.write_table(pa.Table.from_pylist(rows, SCHEMA))
            reference = np.full((len(drive), 3), np.nan) if drive.reference is None else drive.reference
            parts.append(
                (
                    np.array([[r["x_m"], r["y_m"], r["heading_rad"]] for r in rows]),
                    np.array([r["entropy_nats"] for r in rows]),
                    np.array([r["state"] == "locked" for r in rows]),
                    reference,
                )
            )
    return Replayed(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _check_fits(drive: Drive, columns: int) -> None:
    if drive.strip.columns != columns:
        raise DriveError(
            "strips do not fit the bundle", file=drive.name, place="depth_m",
            expected=f"{columns} columns", got=drive.strip.columns,
        )  # fmt: skip


def _row(localizer: Localizer, drive: Drive, row: int, colour: bool) -> dict[str, Any]:
    rgb = drive.rgb[row] if drive.rgb is not None and colour else None
    estimate = localizer.step(drive.odometry[row], drive.depth_m[row], rgb, float(drive.time_s[row]))
    return {
        "time_s": float(drive.time_s[row]),
        "x_m": float(estimate.pose[0]),
        "y_m": float(estimate.pose[1]),
        "heading_rad": float(estimate.pose[2]),
        "covariance": estimate.covariance.ravel().tolist(),
        "mass": estimate.mass,
        "entropy_nats": estimate.entropy,
        "log_evidence_nats": estimate.log_evidence,
        "state": estimate.state,
        "weighed": bool(estimate.weighed),
    }


def seen_surfaces(site: RobotSite, grid: PoseGrid, every: int = 5) -> FloorPlan:
    """What a bundle knows of its site, as short strokes where rings end: a backdrop when no plan is given."""
    cells = site.cells[::every]
    angle = site.layout.ring_angles()
    ranges = site.range_m[::every].astype(float)
    ranges[site.unsure[::every] | ~np.isfinite(ranges)] = np.nan
    x = grid.x_centres()[cells[:, 1], None] + ranges * np.cos(angle)
    y = grid.y_centres()[cells[:, 0], None] + ranges * np.sin(angle)
    strokes = np.stack([x, y, np.roll(x, -1, axis=1), np.roll(y, -1, axis=1)], axis=-1).reshape(-1, 4)
    # rings that neighbour at an edge end on different things: no stroke between those
    short = np.hypot(strokes[:, 2] - strokes[:, 0], strokes[:, 3] - strokes[:, 1]) < grid.cell_m
    strokes = strokes[short]
    blank = np.zeros(len(strokes), int)
    return FloorPlan(strokes, blank, blank + 1, blank - 1, blank)


def draw(replayed: Replayed, plan: FloorPlan, path: Path, title: str) -> None:
    """The trail on the plan."""
    known = np.isfinite(replayed.reference).all(axis=1).any()
    draw_replay(
        plan,
        replayed.pose,
        path,
        entropy_nats=replayed.entropy,
        reference=replayed.reference if known else None,
        locked_at=int(np.argmax(replayed.locked)) if replayed.locked.any() else None,
        title=title,
    )

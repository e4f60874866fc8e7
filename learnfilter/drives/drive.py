"""A recorded drive in memory."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.core.poses import compose
from learnfilter.core.shapes import check
from learnfilter.core.strip import Strip


@dataclass(frozen=True, eq=False)
class Drive:
    """Strips and odometry, in the sensor's raw column order.

    Attributes:
        time_s: [t] seconds, increasing.
        odometry: [t 3] forward_m, left_m, turn_rad of the robot since the previous row, in the
            previous row's frame; zeros in the first.
        depth_m: [t w] range along the bearing, metres; NaN where nothing came back.
        rgb: [t w 3] sRGB in [0, 1], or None for a sensor without colour.
        reference: [t 3] x_m, y_m, heading_rad of the robot, NaN where unknown; None without any.
        strip: the sensor.
        name: for tables and titles.
        site: name of the site it was driven on ("" if unknown); evidence is grouped by it.
    """

    time_s: NDArray[np.float64]
    odometry: NDArray[np.float64]
    depth_m: NDArray[np.float32]
    rgb: NDArray[np.float32] | None
    reference: NDArray[np.float64] | None
    strip: Strip
    name: str = "drive"
    site: str = ""

    def __post_init__(self) -> None:
        sizes = check("time_s", self.time_s, "t")
        check("odometry", self.odometry, "t c", **sizes, c=3)
        check("depth_m", self.depth_m, "t w", **sizes, w=self.strip.columns)
        if self.rgb is not None:
            check("rgb", self.rgb, "t w c", **sizes, w=self.strip.columns, c=3)
        if self.reference is not None:
            check("reference", self.reference, "t c", **sizes, c=3)

    def __len__(self) -> int:
        return len(self.time_s)

    def part(self, start: int, end: int) -> Drive:
        """Rows `start` to before `end` as a drive of its own, named after its first row."""
        odometry = self.odometry[start:end].copy()
        odometry[:1] = 0.0
        return replace(
            self,
            time_s=self.time_s[start:end],
            odometry=odometry,
            depth_m=self.depth_m[start:end],
            rgb=None if self.rgb is None else self.rgb[start:end],
            reference=None if self.reference is None else self.reference[start:end],
            name=f"{self.name}, from row {start}",
        )

    def sensor_reference(self) -> NDArray[np.float64]:
        """[t 3] reference pose of the sensor, NaN where unknown.

        Raises:
            DriveError: the drive has no reference poses at all.
        """
        if self.reference is None:
            raise DriveError("no reference poses", file=self.name, expected="x_m, y_m, heading_rad")
        return compose(self.reference, np.asarray(self.strip.mount))

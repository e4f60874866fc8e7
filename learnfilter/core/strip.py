"""Strip and ring geometry.

A *strip* is what the robot measured: W columns at known bearings in the sensor's frame.  A *ring*
is the full circle of what the plan predicts at one cell: P = bearings_per_heading x headings
bearings at phase + 2 pi p / P in the site frame.  `lay_on_ring` says which raw column serves which
ring bearing, so that turning the sensor by one heading bin is a roll of the ring.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.errors import ConfigError


@dataclass(frozen=True)
class Strip:
    """The sensor: where its columns look and what it can measure.

    Attributes:
        bearings_rad: [W] bearing of each column's centre, sensor frame, counter-clockwise positive,
            in the sensor's raw column order (may run clockwise).
        min_range_m, max_range_m: a return outside this interval does not exist.
        has_colour: whether strips carry linear RGB.
        blind: raw columns that never measure (bodywork).
        mount: pose of the sensor on the robot: x_m, y_m, heading_rad.
    """

    bearings_rad: tuple[float, ...]
    min_range_m: float = 0.1
    max_range_m: float = 8.0
    has_colour: bool = True
    blind: tuple[int, ...] = ()
    mount: tuple[float, float, float] = (0.0, 0.0, 0.0)

    @property
    def columns(self) -> int:
        return len(self.bearings_rad)


def even_strip(first_bearing_deg: float, bearing_step_deg: float, columns: int) -> tuple[float, ...]:
    """Bearings of evenly spaced columns; a negative step runs clockwise."""
    return tuple(float(b) for b in np.radians(first_bearing_deg + bearing_step_deg * np.arange(columns)))


@dataclass(frozen=True)
class RingLayout:
    """How a strip lies on a ring.

    Attributes:
        bearings: P, bearings of a ring.
        bearings_per_heading: K; turning by one heading bin rolls the ring by K.
        phase_rad: site angle of ring bearing 0, in [0, 2 pi / P).
        first: ring bearing, at heading bin 0, of strip position 0 (may be negative).
        source: [W'] raw column that serves each strip position, counter-clockwise; -1 where
            none does, which gives no evidence.
    """

    bearings: int
    bearings_per_heading: int
    phase_rad: float
    first: int
    source: tuple[int, ...]

    @property
    def columns(self) -> int:
        return len(self.source)

    @property
    def step_rad(self) -> float:
        return 2 * np.pi / self.bearings

    @property
    def looks(self) -> int:
        """Headings at which a strip is scored within one heading bin: two where the ring is fine enough
        for them to lie a quarter of a bin to either side of its centre, else the centre alone."""
        return 2 if self.bearings_per_heading % 4 == 0 else 1

    def finer(self) -> RingLayout:
        """The layout whose heading h' looks as look h' of this one does: bin h owns looks 2 h - 1 and 2 h."""
        if self.looks == 1:
            return self
        per_heading = self.bearings_per_heading
        return replace(self, bearings_per_heading=per_heading // 2, first=self.first + per_heading // 4)

    def ring_angles(self) -> NDArray[np.float64]:
        """[P] site angle of each ring bearing, radians."""
        return self.phase_rad + np.arange(self.bearings, dtype=float) * self.step_rad

    def strip_bearings(self) -> NDArray[np.float64]:
        """[W'] sensor-frame bearing of each strip position, radians."""
        return self.phase_rad + (self.first + np.arange(self.columns, dtype=float)) * self.step_rad

    def look_angles(self) -> NDArray[np.float64]:
        """[looks*h W'] site angle along which each strip position points at each look."""
        fine = self.finer()
        looks = np.arange(fine.bearings // fine.bearings_per_heading)[:, None]
        return looks * (fine.bearings_per_heading * fine.step_rad) + fine.strip_bearings()

    def present(self) -> NDArray[np.bool_]:
        """[W'] whether any raw column serves the position; where none does there is no evidence."""
        return np.asarray(self.source) >= 0

    def every(self, step: int) -> RingLayout:
        """The layout that uses every `step`-th position that a column serves; the others give no evidence."""
        served = np.cumsum(self.present()) - 1
        kept = self.present() & (served % step == 0)
        return replace(self, source=tuple(int(s) for s in np.where(kept, self.source, -1)))

    def lay(self, raw: NDArray, axis: int = -1) -> NDArray:
        """Bring the raw column axis (W) of an array into strip positions (W'); gaps become NaN."""
        laid = np.moveaxis(np.take(raw, np.maximum(self.source, 0), axis=axis), axis, -1)
        return np.moveaxis(np.where(self.present(), laid, np.nan), -1, axis)


def lay_on_ring(strip: Strip, headings: int, bearings_per_heading: int) -> RingLayout:
    """Choose phase and columns so that raw bearings meet ring bearings as closely as they can.

    Each ring bearing inside the field of view takes the nearest raw column within half a ring step:
    averaging would invent depths across edges, and a column used twice would count twice.

    Raises:
        ConfigError: two columns share a bearing, or the ring is far finer than the strip.
    """
    if headings < 1 or bearings_per_heading < 1:
        raise ConfigError("the ring is empty", place="grid", expected="headings, bearings per heading >= 1")
    bearings = headings * bearings_per_heading
    step = 2 * np.pi / bearings
    usable = [i for i in range(strip.columns) if i not in set(strip.blind)]
    if not usable:
        raise ConfigError("the strip has no usable column", place="strip.blind")
    order = sorted(usable, key=lambda i: strip.bearings_rad[i])
    angles = np.array([strip.bearings_rad[i] for i in order])
    gaps = np.diff(angles)
    if angles.size > 1 and gaps.min() <= 1e-9:
        raise ConfigError("two columns share a bearing", place="strip", got=f"{np.degrees(angles)}")
    if angles.size > 1 and gaps.min() > 4 * step:
        raise ConfigError(
            "the ring is far finer than the strip",
            place="grid.bearings_per_heading",
            expected=f"a ring step of at least {np.degrees(gaps.min()) / 4:.2f} degrees",
            got=f"{np.degrees(step):.2f}",
        )
    phase = float(_phase(angles, step))
    positions = (angles - phase) / step
    first, last = int(np.rint(positions[0])), int(np.rint(positions[-1]))
    last = min(last, first + bearings - 1)
    source = []
    for place in range(first, last + 1):
        nearest = int(np.argmin(np.abs(positions - place)))
        source.append(order[nearest] if np.rint(positions[nearest]) == place else -1)
    return RingLayout(bearings, bearings_per_heading, phase, first, tuple(source))


def _phase(angles: NDArray[np.float64], step: float) -> float:
    """Circular mean of the bearings modulo the ring's step, in [0, step)."""
    turns = np.exp(2j * np.pi * angles / step)
    mean = turns.mean()
    if abs(mean) < 1e-6:  # columns spread evenly over the step: any phase serves
        return 0.0
    phase = (np.angle(mean) / (2 * np.pi) * step) % step
    # rounding may return a whole step, which is phase zero one bearing further on
    return 0.0 if step - phase < 1e-9 * step else phase


EDGE = 1e-6  # of a sub-cell: an end on an edge belongs to the sub-cell above it, whatever the last bits say


def end_offsets(
    range_m: ArrayLike, angle_rad: ArrayLike, cell_m: float, scale: int
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Sub-cell in which columns end, counted from the lower left sub-cell of the sensor's cell.

    The sensor stands at the cell's centre, so the answer is the same for every cell.  With an even scale
    that centre is a corner of sub-cells and an axis-aligned column runs along an edge: hence EDGE, and
    hence this one place for whoever counts end points.

    Args:
        range_m: metres along each column.
        angle_rad: site angle of each column, broadcast against the ranges.
        cell_m: side of a cell.
        scale: sub-cells a cell side.

    Returns:
        Rows and columns, shaped as the arguments broadcast.
    """
    reach = np.asarray(range_m, dtype=float) * (scale / cell_m)
    rows, columns = reach * np.sin(angle_rad), reach * np.cos(angle_rad)
    return (
        np.floor(rows + (scale / 2 + EDGE)).astype(np.int64),
        np.floor(columns + (scale / 2 + EDGE)).astype(np.int64),
    )

"""What happened on a replayed drive: where the robot locked, where it was lost and why, how it ended."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.estimate import Mode
from learnfilter.drives.metrics import located, pose_errors
from learnfilter.runtime.watch import bet

STATES = ("searching", "locked", "lost")
LOCKED, LOST = STATES.index("locked"), STATES.index("lost")
# What a replay keeps of every row: a few numbers, however wide the strips and however long the drive.
ROW = np.dtype(
    [
        ("time_s", "f8"),
        ("travelled_m", "f4"),  # since the first row
        ("pose", "f4", 3),  # x_m, y_m, heading_rad
        ("mass", "f4"),
        ("entropy", "f4"),  # nats
        ("surprise", "f4"),  # p-value, NaN without a watch
        ("state", "i1"),  # index into STATES
        ("weighed", "?"),
        ("alarm", "?"),
        ("reference", "f4", 3),  # NaN where unknown
    ]
)
Rows = NDArray[np.void]  # [t] of ROW
Pose = tuple[float, float, float]
LEAST_MASS = 0.01  # of a mode worth a word
MOST_TOLD = 5  # p-values in one sentence; the summary has them all


@dataclass(frozen=True)
class Moment:
    """A row at which something happened, numbered from 0 as in the table of estimates.

    Attributes:
        row, time_s, travelled_m: when, and how far from the first row.
        pose: x_m, y_m, heading_rad, as estimated there.
    """

    row: int
    time_s: float
    travelled_m: float
    pose: Pose

    @property
    def what(self) -> str:
        """What happened, to go after the row."""
        raise NotImplementedError

    @property
    def sentence(self) -> str:
        """When and what, for people."""
        return f"Row {self.row} ({self.time_s:.1f} s, {self.travelled_m:.1f} m driven): {self.what}."

    def plain(self) -> dict[str, Any]:
        """Values for JSON."""
        return {"kind": type(self).__name__.lower(), **asdict(self), "sentence": self.sentence}


@dataclass(frozen=True)
class Locked(Moment):
    """The first lock after power-up, or after the robot was lost.

    Attributes:
        strips: weighed since then, this one included.
        off_m, off_rad: from the reference pose; None where that is unknown.
        right: whether that is near enough to count as located; None likewise.
        first_wrong_row: at which a locked pose was not, None if never as far as is known.
    """

    strips: int
    off_m: float | None
    off_rad: float | None
    right: bool | None
    first_wrong_row: int | None

    @property
    def what(self) -> str:
        told = f"locked at {place(self.pose)}, strip {self.strips} of the search"
        if self.off_m is None or self.off_rad is None:
            return told
        off = f"{self.off_m:.2f} m and {np.degrees(self.off_rad):.0f} degrees from the reference"
        if not self.right:
            return f"{told}; wrong, {off}"
        later = "" if self.first_wrong_row is None else f", but wrong from row {self.first_wrong_row} on"
        return f"{told}; right, {off}{later}"


@dataclass(frozen=True)
class Lost(Moment):
    """The search began anew.

    Attributes:
        was_locked: whether there had been a lock since the last time.
        alarm: whether surprises had added up; else the belief had left the locked pose.
        surprises: (row, p-value) of each strip that bet against the plan in the run-up to the alarm.
        mass: of the belief near the best mode after it.
    """

    was_locked: bool
    alarm: bool
    surprises: tuple[tuple[int, float], ...]
    mass: float

    @property
    def what(self) -> str:
        told = "lost" if self.was_locked else "the search began anew before it had locked"
        if not self.alarm:
            return (
                f"{told}, for the belief left the locked pose; {self.mass:.0%} is now near {place(self.pose)}"
            )
        count = len(self.surprises)
        worst = sorted(sorted(self.surprises, key=lambda strip: strip[1])[:MOST_TOLD])
        values = ", ".join(f"p = {p:.1g} (row {row})" for row, p in worst)
        which = f"{count} strips" if count <= MOST_TOLD else f"{count} strips, above all these {MOST_TOLD}"
        return f"{told}, for surprises added up to an alarm over {which}: {values}"


@dataclass(frozen=True)
class Unlocked(Moment):
    """The end of a drive that ends without a lock.

    Attributes:
        ever: whether there was one at all.
        state: at the end.
        entropy_nats: of the belief.
        modes: (mass, x_m, y_m, heading_rad) of its separate modes, heaviest first.
    """

    ever: bool
    state: str
    entropy_nats: float
    modes: tuple[tuple[float, float, float, float], ...]

    @property
    def what(self) -> str:
        told = f"the drive ends {self.state}" if self.ever else "the drive ends, never locked"
        told_of = [mode for mode in self.modes if mode[0] >= LEAST_MASS]
        shares = ", ".join(f"{mass:.0%} near {place(pose)}" for mass, *pose in told_of)
        return f"{told}; entropy {self.entropy_nats:.1f} nats, separate modes: {shares}"


def place(pose: Sequence[float]) -> str:
    """A pose [3] in words."""
    x, y, heading = pose
    return f"({x:.2f}, {y:.2f}) m, heading {np.degrees(heading):.0f} degrees"


def episodes(rows: Rows, modes: Sequence[Mode]) -> tuple[Moment, ...]:
    """What happened, in order.

    A lock that lapses and comes back without the robot having been lost is one lock.

    Args:
        rows: [t] of a replay, at least one.
        modes: of the last row's estimate.
    """
    lost = rows["state"] == LOST
    losses = np.flatnonzero(rows["alarm"] | (lost & ~np.r_[False, lost[:-1]]))
    climbs = dict(_climbs(rows))
    told: list[Moment] = []
    for start, end in zip([0, *losses], [*losses, len(rows)], strict=True):
        held = start + np.flatnonzero(rows["state"][start:end] == LOCKED)
        if held.size:
            told.append(_locked(rows, start, held))
        if end < len(rows):
            alarm = bool(rows["alarm"][end])
            mass = float(rows["mass"][end])
            told.append(Lost(*_moment(rows, end), held.size > 0, alarm, climbs.get(int(end), ()), mass))
    if rows["state"][-1] != LOCKED:
        ever, state = bool((rows["state"] == LOCKED).any()), STATES[rows["state"][-1]]
        plain = tuple((float(mode.mass), *_pose(mode.pose)) for mode in modes)
        told.append(Unlocked(*_moment(rows, len(rows) - 1), ever, state, float(rows["entropy"][-1]), plain))
    return tuple(told)


def wrong(rows: Rows) -> NDArray[np.bool_]:
    """[t] whether a locked pose is known to be far from the reference."""
    return (rows["state"] == LOCKED) & (located(rows["pose"], rows["reference"]) == 0)


def _moment(rows: Rows, row: int) -> tuple[int, float, float, Pose]:
    time_s, travelled_m = float(rows["time_s"][row]), float(rows["travelled_m"][row])
    return int(row), time_s, travelled_m, _pose(rows["pose"][row])


def _pose(pose: NDArray[np.floating]) -> Pose:
    x, y, heading = map(float, pose)
    return x, y, heading


def _locked(rows: Rows, start: int, held: NDArray[np.int64]) -> Locked:
    first = int(held[0])
    # the strip at which the search began anew counts as its first
    strips = int(rows["weighed"][start : first + 1].sum())
    off = [float(gap) for gap in pose_errors(rows["pose"][first], rows["reference"][first])]
    known = bool(np.isfinite(off).all())
    bad = held[wrong(rows[held])]
    return Locked(
        *_moment(rows, first),
        strips,
        off[0] if known else None,
        off[1] if known else None,
        bool(located(rows["pose"][first], rows["reference"][first]) == 1) if known else None,
        int(bad[0]) if bad.size else None,
    )


def _climbs(rows: Rows) -> Iterator[tuple[int, tuple[tuple[int, float], ...]]]:
    """Rows with an alarm, and which strips won their bets since the sum of bets last was below one."""
    total, led = 0.0, list[tuple[int, float]]()
    for row in np.flatnonzero(rows["weighed"] & np.isfinite(rows["surprise"])):
        p = float(rows["surprise"][row])
        total = (1.0 + total) * bet(p)
        if total < 1.0:
            led = []
        elif bet(p) > 1.0:
            led.append((int(row), p))
        if rows["alarm"][row]:
            yield int(row), tuple(led)
            total, led = 0.0, []

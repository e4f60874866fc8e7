"""What a page shows of a replayed drive, as plain values: no colour, nothing of HTML."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from numpy.typing import NDArray

from learnfilter.core.shapes import check
from learnfilter.plan.floorplan import FloorPlan


class PlacePatch(Protocol):
    """A square of the plan that a robot found otherwise: 'gone' or 'new', see `palette.PATCH_LOOKS`."""

    @property
    def kind(self) -> str: ...
    @property
    def x_m(self) -> float: ...
    @property
    def y_m(self) -> float: ...
    @property
    def side_m(self) -> float: ...


@dataclass(frozen=True, eq=False)
class Trail:
    """Where one filter believed the robot to be.

    Attributes:
        label: its name.
        pose: [t 3] x_m, y_m, heading_rad; NaN where the line breaks.
        entropy_nats: [t] of the belief.
        lost: [t] whether the robot was lost.
        locks: [k 3] poses at which it locked.
    """

    label: str
    pose: NDArray
    entropy_nats: NDArray
    lost: NDArray
    locks: NDArray

    def __post_init__(self):
        sizes = check("pose", self.pose, "t p", p=3)
        check("entropy_nats", self.entropy_nats, "t", **sizes)
        check("lost", self.lost, "t", t=sizes["t"])
        check("locks", self.locks, "k p", p=3)


@dataclass(frozen=True, eq=False)
class TrailMap:
    """One drive as one or several filters understood it.

    Attributes:
        trails: at least one.
        reference: [r 3] poses known from elsewhere, NaN where unknown; None without any.
        patches: of the plan that disagree.
    """

    title: str
    plan: FloorPlan
    trails: tuple[Trail, ...]
    reference: NDArray | None = None
    patches: tuple[PlacePatch, ...] = ()
    note: str = ""

    def __post_init__(self):
        if self.reference is not None:
            check("reference", self.reference, "r p", p=3)


@dataclass(frozen=True)
class Timeline:
    """What state filters were in, one line a filter.

    Attributes:
        lines: label; stretches (first row, row after the last, state), state one of `timeline.STATES`; rows
            that gave an alarm.
    """

    title: str
    lines: tuple[tuple[str, tuple[tuple[int, int, str], ...], tuple[int, ...]], ...]
    note: str = ""


@dataclass(frozen=True)
class Story:
    """Sentences in order."""

    title: str
    sentences: tuple[str, ...]

"""What a page shows, as plain values: no widget, no colour, nothing of HTML."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.shapes import check
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.report.drive_model import Story, Timeline, TrailMap


class PlaceNote(Protocol):
    """Something to say about a place on a plan; findings of the plan checks are such notes."""

    @property
    def severity(self) -> str: ...
    @property
    def message(self) -> str: ...
    @property
    def where(self) -> tuple[float, float] | None: ...
    @property
    def advice(self) -> str: ...


@dataclass(frozen=True)
class Note:
    """A PlaceNote for those who have no class of their own.

    Attributes:
        message: one sentence.
        where: x, y in metres, or None when it concerns the whole plan.
        severity: "error", "warning" or "note".
        advice: what to do about it.
    """

    message: str
    where: tuple[float, float] | None = None
    severity: str = "note"
    advice: str = ""


@dataclass(frozen=True)
class Interval:
    """A number with its interval; low and high are NaN where there is none."""

    value: float
    low: float = float("nan")
    high: float = float("nan")


Cell = str | int | float | Interval | None


@dataclass(frozen=True)
class Column:
    """A table's column: how numbers are written (a format spec) and which end is the better one."""

    label: str
    form: str = ".2f"
    best: Literal["", "high", "low"] = ""


@dataclass(frozen=True)
class Table:
    """Rows as long as `columns`; None is shown as a dash."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    note: str = ""


@dataclass(frozen=True)
class Forest:
    """Paired differences, one bar a row, about zero.

    Attributes:
        rows: what was compared and the difference.
        x_label: what a difference is, with its unit.
        below, above: whom a difference below or above zero favours.
    """

    title: str
    rows: tuple[tuple[str, Interval], ...]
    x_label: str
    below: str
    above: str
    form: str = "+.2f"
    note: str = ""


@dataclass(frozen=True, eq=False)
class Curve:
    """A line: x and y [n], and the band around it (low, high [n]) where there is one."""

    label: str
    x: NDArray
    y: NDArray
    low: NDArray | None = None
    high: NDArray | None = None

    def __post_init__(self):
        sizes = check("x", np.asarray(self.x), "n")
        for name in ("y", "low", "high"):
            if getattr(self, name) is not None:
                check(name, np.asarray(getattr(self, name)), "n", **sizes)


@dataclass(frozen=True)
class Chart:
    """Curves on common axes; y_range fixes the vertical axis, `form` writes its ticks."""

    title: str
    x_label: str
    y_label: str
    curves: tuple[Curve, ...]
    y_range: tuple[float, float] | None = None
    form: str = "g"
    note: str = ""


@dataclass(frozen=True)
class Placement:
    """Where a lattice of cells lies: its outer lower left corner and the side of a cell, metres."""

    left_m: float
    bottom_m: float
    cell_m: float


@dataclass(frozen=True, eq=False)
class Track:
    """One model on one drive.

    Attributes:
        model: name.
        mass: [t r c] probability of each cell after each weighed strip, headings summed; row 0 at the
            smallest y.
        estimate: [t 3] x_m, y_m, heading_rad of the robot.
        entropy_nats: [t] of the belief over poses.
        near_reference: [t] mass near the reference pose, or None without one.
        locked: [t] whether the filter had locked.
    """

    model: str
    mass: NDArray
    estimate: NDArray
    entropy_nats: NDArray
    near_reference: NDArray | None = None
    locked: NDArray | None = None

    def __post_init__(self):
        sizes = check("mass", self.mass, "t r c")
        check("estimate", self.estimate, "t p", t=sizes["t"], p=3)
        for name in ("entropy_nats", "near_reference", "locked"):
            if getattr(self, name) is not None:
                check(name, getattr(self, name), "t", t=sizes["t"])


@dataclass(frozen=True, eq=False)
class Episode:
    """One drive, watched through one or several models.

    Attributes:
        name: of the drive.
        plan: of the site.
        placement: of the cells of every track's mass.
        tracks: one a model, all over the same strips.
        bearings_rad: [w] bearing of each column in the sensor's frame.
        depth_m: [t w] range along the bearing; NaN where nothing came back.
        reference: [t 3] x_m, y_m, heading_rad of the robot, NaN where unknown; None without any.
        mount: pose of the sensor on the robot: x_m, y_m, heading_rad.
    """

    name: str
    plan: FloorPlan
    placement: Placement
    tracks: tuple[Track, ...]
    bearings_rad: NDArray
    depth_m: NDArray
    reference: NDArray | None = None
    mount: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self):
        sizes = check("bearings_rad", self.bearings_rad, "w")
        sizes = check("depth_m", self.depth_m, "t w", **sizes)
        if self.reference is not None:
            check("reference", self.reference, "t p", t=sizes["t"], p=3)
        for track in self.tracks:
            check(f"mass of {track.model}", track.mass, "t r c", t=sizes["t"])

    @property
    def steps(self) -> int:
        return len(self.depth_m)


@dataclass(frozen=True, eq=False)
class SiteMap:
    """A plan with numbered notes and, where given, a value in every cell.

    Attributes:
        values: [r c], row 0 at the smallest y, NaN where a cell has none.
        value_label: what a value is, with its unit.
    """

    title: str
    plan: FloorPlan
    notes: tuple[PlaceNote, ...] = ()
    values: NDArray | None = None
    placement: Placement | None = None
    value_label: str = ""
    note: str = ""


@dataclass(frozen=True)
class RunPage:
    """One run's report.

    Attributes:
        title: name of the run.
        verb: what was done.
        headline: the verdict in one sentence.
        confidence: how sure that is, and on what evidence.
        job: what the run was asked to do.
        episodes: drives to watch.
        trail_maps: drives on the plan.
        timelines, stories: what happened on them.
        maps: plans with notes.
        tables, forests: the comparison.
        charts: curves.
        facts: tables of sizes and timings.
        cautions: what a reader must not conclude; the safety notice is always added.
        provenance: versions, seeds, command line, content hashes, in the order given.
        settings: the resolved config as text.
    """

    title: str
    verb: str
    headline: str
    confidence: str
    job: str
    episodes: tuple[Episode, ...] = ()
    trail_maps: tuple[TrailMap, ...] = ()
    timelines: tuple[Timeline, ...] = ()
    stories: tuple[Story, ...] = ()
    maps: tuple[SiteMap, ...] = ()
    tables: tuple[Table, ...] = ()
    forests: tuple[Forest, ...] = ()
    charts: tuple[Chart, ...] = ()
    facts: tuple[Table, ...] = ()
    cautions: tuple[str, ...] = ()
    provenance: Mapping[str, str] = field(default_factory=dict)
    settings: str = ""

"""What a replay shows: trails on the plan, states along the drive, what happened, what disagrees."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.app.episodes import LOCKED, LOST, STATES, Locked, Rows, wrong
from learnfilter.app.patches import areas
from learnfilter.app.replaying import Replayed
from learnfilter.core.grid import PoseGrid
from learnfilter.plan import FloorPlan
from learnfilter.report import Chart, Column, Curve, Story, Table, Timeline, Trail, TrailMap
from learnfilter.report.model import Cell
from learnfilter.runtime.site import RobotSite

# More points than this make pages heavy, and no eye tells them apart.
MOST_POINTS = 1200
LEAP_M = 1.0  # beyond what was driven: more than a lock is ever off, so another mode
WRONGLY = len(STATES)  # a state that only a reference pose tells

Replays = Mapping[str, Replayed]  # by the name of the bundle


def trail_map(replays: Replays, plan: FloorPlan, title: str) -> TrailMap:
    """The trails on the plan, and the patches of the first bundle, which is named where it is not alone."""
    first = next(iter(replays.values()))
    reference = _thinned(first.rows)["reference"]
    note = ""
    if len(replays) > 1 and first.patches:
        note = f"Squares that disagree are those of {next(iter(replays))}."
    return TrailMap(
        title,
        plan,
        tuple(_trail(name, replayed) for name, replayed in replays.items()),
        reference if np.isfinite(reference).any() else None,
        first.patches,
        note,
    )


def _trail(name: str, replayed: Replayed) -> Trail:
    rows = _broken(_thinned(replayed.rows))
    locks = [episode.pose for episode in replayed.episodes if isinstance(episode, Locked)]
    return Trail(name, rows["pose"], rows["entropy"], rows["state"] == LOST, np.array(locks).reshape(-1, 3))


def _thinned(rows: Rows) -> Rows:
    """Weighed rows, evenly chosen where there are more than can be seen."""
    weighed = np.flatnonzero(rows["weighed"])
    count = min(len(weighed), MOST_POINTS)
    return rows[weighed[np.linspace(0, len(weighed) - 1, count).round().astype(int)]]


def _broken(rows: Rows) -> Rows:
    """The same with a row of NaN wherever the estimate leapt: the robot did not go there."""
    leapt = np.hypot(*np.diff(rows["pose"][:, :2], axis=0).T) > np.diff(rows["travelled_m"]) + LEAP_M
    at = np.flatnonzero(leapt) + 1
    gap = np.zeros(1, rows.dtype)
    gap["pose"] = gap["entropy"] = np.nan
    return np.insert(rows, at, gap)


def timeline(replays: Replays) -> Timeline:
    """States along the drive."""
    lines = tuple(
        (name, _stretches(replayed.rows), tuple(map(int, np.flatnonzero(replayed.rows["alarm"]))))
        for name, replayed in replays.items()
    )
    return Timeline("State, row by row", lines)


def _stretches(rows: Rows) -> tuple[tuple[int, int, str], ...]:
    state = np.where(wrong(rows), WRONGLY, rows["state"])
    starts = np.r_[0, np.flatnonzero(np.diff(state)) + 1]
    names = (*STATES, "locked wrongly")
    ends = (*starts[1:], len(rows))
    return tuple((int(a), int(b), names[state[a]]) for a, b in zip(starts, ends, strict=True))


def charts(replays: Replays) -> tuple[Chart, ...]:
    """Entropy and surprise along the drive; peaks survive the thinning of a long one."""
    entropy = [_curve(name, replayed.rows, replayed.rows["entropy"]) for name, replayed in replays.items()]
    drawn = [Chart("How undecided the filter is", "row", "entropy, nats", tuple(entropy))]
    surprise = [
        _curve(name, replayed.rows, -np.log10(replayed.rows["surprise"]))
        for name, replayed in replays.items()
        if np.isfinite(replayed.rows["surprise"]).any()
    ]
    if surprise:
        note = "2 is a strip that one in a hundred surprises as much where the plan is true."
        drawn.append(
            Chart("How surprising each strip is", "row", "-log10 of its p-value", tuple(surprise), note=note)
        )
    return tuple(drawn)


def _curve(name: str, rows: Rows, values: NDArray[Any]) -> Curve:
    """Of the weighed rows; the largest value of each stretch where there are many."""
    weighed = np.flatnonzero(rows["weighed"])
    starts = np.linspace(0, len(weighed), min(len(weighed), MOST_POINTS), endpoint=False).astype(int)
    return Curve(name, weighed[starts], np.maximum.reduceat(values[weighed], starts))


def stories(replays: Replays) -> tuple[Story, ...]:
    """What happened, and what the plan does not agree with, in sentences."""
    told = []
    for name, replayed in replays.items():
        where = "" if len(replays) == 1 else f", {name}"
        told.append(Story(f"What happened{where}", tuple(e.sentence for e in replayed.episodes)))
        found = tuple(area.sentence for area in areas(replayed.patches))
        told.append(
            Story(
                f"Where the plan disagrees{where}",
                (*(found or (_nothing(replayed.rows),)), *_doubt(replayed.rows)),
            )
        )
    return tuple(told)


def _nothing(rows: Rows) -> str:
    if (rows["state"] == LOCKED).any():
        return "Nowhere that was seen while locked."
    return "Nobody can tell: patches are compared while the robot is locked, and it never was."


def _doubt(rows: Rows) -> tuple[str, ...]:
    astray, locked = int(wrong(rows).sum()), int((rows["state"] == LOCKED).sum())
    if not astray:
        return ()
    return (
        f"In {astray} of {locked} locked rows the pose was wrong, and patches were compared all the same.",
    )


def comparison(replays: Replays) -> Table:
    """One row a bundle."""
    columns = (
        Column("bundle"),
        Column("strips until lock", ".0f", "low"),
        Column("metres until lock", ".1f", "low"),
        Column("share locked", ".2f", "high"),
        Column("share located", ".2f", "high"),
        Column("times lost", ".0f", "low"),
        Column("ms a strip", ".2f", "low"),
    )
    rows = []
    for name, replayed in replays.items():
        said = replayed.summary()
        keys = ("strips_until_lock", "metres_until_lock", "locked_share", "located_share", "lost")
        row: tuple[Cell, ...] = (name, *(said[key] for key in keys), replayed.milliseconds)
        rows.append(row)
    note = (
        "Strips until the first lock are weighed ones; shares are of all rows, located within 0.5 m and 15 "
        "degrees of the reference pose where there is one; time is a weighed strip's here, mean."
    )
    return Table("Bundles on this drive", columns, tuple(rows), note)


def headline(replays: Replays) -> str:
    """How it went, a clause a bundle."""
    clauses = []
    for name, replayed in replays.items():
        share, lost = float((replayed.rows["state"] == LOCKED).mean()), replayed.lost
        times = {0: "never lost", 1: "lost once"}.get(lost, f"lost {lost} times")
        told = f"locked in {share:.0%} of {len(replayed.rows)} rows, {times}"
        clauses.append(told.capitalize() if len(replays) == 1 else f"{name}: {told}")
    return "; ".join(clauses) + "."


def confidence(replays: Replays) -> str:
    """What is known of how right that was."""
    shares = {name: replayed.summary()["located_share"] for name, replayed in replays.items()}
    if None in shares.values():
        return "The drive has no reference poses: nobody can say here whether a lock was right."
    own = ", ".join(
        f"{share:.0%}" + (f" ({name})" if len(shares) > 1 else "") for name, share in shares.items()
    )
    return f"Within 0.5 m and 15 degrees of the reference in {own} of the rows that have one."


def lines(replays: Replays) -> Sequence[str]:
    """All of it for the terminal."""
    told = [headline(replays), confidence(replays)]
    for story in stories(replays):
        told += [f"{story.title}:", *(f"- {sentence}" for sentence in story.sentences)]
    return told


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

"""A small invented site, a drive on it and a page about both."""

from typing import NamedTuple

import numpy as np

from learnfilter.plan.floorplan import DOOR, NO_FINISH, OPEN, SHUT, UNKNOWN, WALL, WINDOW, Finish, FloorPlan
from learnfilter.report import (
    Chart,
    Column,
    Curve,
    Episode,
    Forest,
    Interval,
    Note,
    Placement,
    RunPage,
    SiteMap,
    Story,
    Table,
    Timeline,
    Track,
    Trail,
    TrailMap,
)

HOSTILE = "<script>alert('x')</script> & \"quoted\" $1"
STEPS, ROWS, COLUMNS = 12, 6, 8


def sample_plan() -> FloorPlan:
    """A 4 x 3 m room: a red wall, three doors in their three states, a window."""
    rows = [
        (0, 0, 4, 0, WALL, SHUT, 0),
        (4, 0, 4, 3, WALL, SHUT, NO_FINISH),
        (4, 3, 3, 3, DOOR, OPEN, NO_FINISH),
        (3, 3, 2, 3, DOOR, SHUT, NO_FINISH),
        (2, 3, 1, 3, DOOR, UNKNOWN, NO_FINISH),
        (1, 3, 0, 3, WINDOW, SHUT, NO_FINISH),
        (0, 3, 0, 0, WALL, SHUT, NO_FINISH),
    ]
    table = np.array(rows, dtype=float)
    desk = np.array([[1, 1], [2, 1], [2, 1.5], [1, 1.5]])
    void = np.array([[3, 2], [4, 2], [4, 3], [3, 3]])
    finishes = (Finish("signal red", (0.8, 0.1, 0.2)),)
    return FloorPlan(
        table[:, :4],
        table[:, 4],
        table[:, 5],
        table[:, 6],
        np.arange(len(rows)),
        finishes,
        (desk,),
        (void,),
        name=HOSTILE,
    )


def sample_episode(plan: FloorPlan) -> Episode:
    """A belief that sits in cell k of the lattice at step k, and a robot that stands still."""
    mass = np.zeros((STEPS, ROWS, COLUMNS))
    for step in range(STEPS):
        mass[step, step // COLUMNS, step % COLUMNS] = 1.0
    reference = np.tile([1.0, 1.0, np.pi / 2], (STEPS, 1))
    estimate = reference + np.array([0.3, 0.4, np.radians(10)])
    near = np.linspace(0, 1, STEPS)
    tracks = tuple(
        Track(model, mass, estimate, np.linspace(5, 1, STEPS), near, near > 0.9)
        for model in ("matcher", HOSTILE)
    )
    depth = np.full((STEPS, 3), 2.0)
    depth[:, 1] = np.nan
    bearings = np.array([-np.pi / 2, 0.0, np.pi / 2])
    return Episode("drive one", plan, Placement(0.0, 0.0, 0.5), tracks, bearings, depth, reference)


class SamplePatch(NamedTuple):
    """A square that disagrees."""

    kind: str
    x_m: float
    y_m: float
    side_m: float = 0.5


def sample_trail(label: str = "matcher", lost: int = 2) -> Trail:
    """From (0.5, 2) to (3.5, 2), locked at its last pose, lost at its first ones."""
    poses = np.column_stack([np.linspace(0.5, 3.5, 6), np.full(6, 2.0), np.zeros(6)])
    return Trail(label, poses, np.linspace(5, 1, 6), np.arange(6) < lost, poses[-1:])


def sample_trails(plan: FloorPlan, *labels: str, lost: int = 2) -> TrailMap:
    """Trails of these names, a reference pose that is not always known, and a patch of each kind."""
    trails = tuple(sample_trail(label, lost) for label in labels)
    reference = trails[0].pose.copy()
    reference[2] = np.nan
    patches = (SamplePatch("gone", 1.25, 1.25), SamplePatch("new", 3.25, 0.75))
    return TrailMap(HOSTILE, plan, trails, reference, patches, HOSTILE)


def sample_timeline() -> Timeline:
    """Every state there is, and an alarm."""
    stretches = ((0, 3, "searching"), (3, 8, "locked"), (8, 10, "locked wrongly"), (10, 12, "lost"))
    return Timeline(HOSTILE, ((HOSTILE, stretches, (10,)), ("other", ((0, 12, "locked"),), ())), HOSTILE)


def sample_page(plan: FloorPlan, episode: Episode) -> RunPage:
    """Every section in use, and a hostile text wherever text may stand."""
    x = np.arange(1, 5)
    columns = (Column(HOSTILE), Column("located", ".1%", "high"), Column("NLL, nats", ".2f", "low"))
    rows = (("matcher", Interval(0.917, 0.88, 0.95), 1.61), (HOSTILE, Interval(0.8, 0.7, 0.9), 3.62))
    return RunPage(
        title=HOSTILE,
        verb="ablate",
        headline=f"The verdict {HOSTILE}",
        confidence=HOSTILE,
        job=HOSTILE,
        episodes=(episode, episode),
        trail_maps=(sample_trails(plan, "matcher", HOSTILE),),
        timelines=(sample_timeline(),),
        stories=(Story(HOSTILE, (HOSTILE,)),),
        maps=(SiteMap(HOSTILE, plan, (Note(HOSTILE, (1, 1), "error", HOSTILE),)),),
        tables=(Table(HOSTILE, columns, rows, HOSTILE),),
        forests=(Forest(HOSTILE, ((HOSTILE, Interval(0.1, 0.02, 0.18)),), HOSTILE, HOSTILE, HOSTILE),),
        charts=(Chart(HOSTILE, HOSTILE, HOSTILE, (Curve(HOSTILE, x, x / 4, x / 5, x / 3),), note=HOSTILE),),
        facts=(Table("Sizes", (Column("model"), Column("parameters")), (("matcher", 12704),)),),
        cautions=(HOSTILE,),
        provenance={HOSTILE: HOSTILE, "seed": "7"},
        settings=HOSTILE,
    )

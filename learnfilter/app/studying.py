"""The sites a study is made on: invented, a plan of the user's with simulated drives, or recorded ones."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import NamedTuple

from learnfilter.app.build import build_conditions, build_plan, build_strip, check_invented
from learnfilter.app.config import SiteConfig
from learnfilter.app.grounds import Rehearsal, build_lattices, drives_on, make_grounds
from learnfilter.app.progress import progress
from learnfilter.app.recipes import StudyConfig
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.errors import DriveError
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import read_drive
from learnfilter.filtering.course import Ground
from learnfilter.plan import FloorPlan

# A single plan stands for a dozen invented sites with two drives each.
DRIVES_ON_ONE_PLAN = 12


class Subject(NamedTuple):
    """What models are judged on.

    Attributes:
        grounds: sites with courses.
        plans: the plan of each.
        drives: the drives of each.
        title: in words.
    """

    grounds: Sequence[Ground]
    plans: Sequence[FloorPlan]
    drives: Sequence[Sequence[Drive]]
    title: str


def study_subject(
    settings: TrainConfig,
    site: SiteConfig,
    condition: object,
    study: StudyConfig,
    seed: int,
    recorded: Sequence[str] = (),
) -> Subject:
    """Make or read what models are judged on.

    Args:
        settings: of the training run: sensor, lattice.
        site: families to invent from, or the user's plan.
        condition: a ConditionConfig, for simulated drives.
        study: how much.
        seed: of what is invented.
        recorded: drive tables on `site.file`.

    Raises:
        DriveError: a recorded drive has another number of columns than the models' sensor.
    """
    lattices, strip = build_lattices(settings), build_strip(settings.strip)
    conditions = build_conditions(condition)
    if site.file is None:
        check_invented(site)
        rehearsal = Rehearsal(
            tuple(site.families),
            study.sites,
            study.drives,
            study.rows,
            0,
            site.width_m,
            site.depth_m,
            conditions,
        )
        with progress("unseen sites") as tick:
            made = make_grounds(rehearsal, strip, lattices, seed, "test", tick)
        return Subject(
            made.grounds, made.plans, made.drives, f"{study.sites} invented sites, none seen in training"
        )
    plan = build_plan(site)
    if recorded:
        drives = tuple(read_drive(path, strip, depth_kind=settings.strip.depth_kind) for path in recorded)
        title = f"{len(drives)} recorded drives on {plan.name}"
    else:
        count = study.drives * DRIVES_ON_ONE_PLAN
        with progress("drives on your plan") as tick:
            drives = drives_on(
                plan, strip, conditions, count, study.rows, seed, lattices.robot_radius_m, tick
            )
        title = f"{count} simulated drives on {plan.name}"
    for drive in drives:
        if drive.strip.columns != strip.columns:
            raise DriveError(
                "other sensor than the models'", file=drive.name,
                expected=f"{strip.columns} columns", got=drive.strip.columns,
            )  # fmt: skip
    ground = lattices.ground(lattices.render(plan, Path(settings.runs) / "cache"), drives)
    return Subject((ground,), (plan,), (drives,), title)

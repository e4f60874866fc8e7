"""Make sites and simulated drives through them.

Sites are invented (`site.families` are taken in turn) or read from your own plan (`site=file`). What the
drive has and the plan lacks, furniture, people, light, faults of the sensor and of the wheels, is set by
`condition`; several conditions join: condition=[dim-light,crowd]. The same seed makes the same drives.
The run's folder gets sites/*.geojson, drives/* and summary.json; a stopped run goes on where it was.

Example:
  learnfilter rehearse name=evening count=4 rows=60 condition=[dim-light,crowd]
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any

from learnfilter.app.build import build_conditions, build_plan, build_strip, check_invented
from learnfilter.app.progress import progress
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import RehearseConfig
from learnfilter.core.seeds import stream
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import write_drive
from learnfilter.plan import FloorPlan, write_plan
from learnfilter.sim import build_world, rehearse, rehearse_site

# Makes the site of a number and, as they are asked for, the drives on it.
Maker = Callable[[int], tuple[FloorPlan, Iterable[Drive]]]


def run(settings: RehearseConfig) -> dict[str, Any]:
    """Do the verb; returns the summary.

    Raises:
        ConfigError: a setting out of range, or the folder holds a run with other settings.
        PlanError: the plan cannot be read, or has no room for the robot.
    """
    from_file = settings.site.file is not None
    make = _on_file(settings) if from_file else _invent(settings)
    count = 1 if from_file else settings.count
    folder = open_run("rehearse", settings.name or "default", settings)
    with progress("rehearse") as tick:
        for index in range(count):
            mark = folder.path / "sites" / f"{index:04d}.geojson"
            if not mark.exists():  # written last, so what is there is whole
                plan, drives = make(index)
                for day, drive in enumerate(drives):
                    write_drive(drive, folder.path / "drives" / f"{index:04d}-{day:02d}.{settings.format}")
                write_plan(plan, mark)
            tick(index + 1, count, "")
    summary = folder.finish({"sites": count, "drives": count * settings.drives, "rows": settings.rows})
    print(f"written: {folder.path} (sites: {count}, drives: {count * settings.drives})")
    return summary


def _invent(settings: RehearseConfig) -> Maker:
    site = settings.site
    check_invented(site)
    conditions, strip = build_conditions(settings.condition), build_strip(settings.strip)

    def make(index: int) -> tuple[FloorPlan, Iterable[Drive]]:
        return rehearse_site(
            settings.seed,
            site.families[index % len(site.families)],
            conditions,
            strip,
            settings.rows,
            settings.drives,
            site.width_m,
            site.depth_m,
            index=index // len(site.families),
            robot_radius_m=settings.robot_radius_m,
        )[:2]

    return make


def _on_file(settings: RehearseConfig) -> Maker:
    plan = build_plan(settings.site)
    conditions, strip = build_conditions(settings.condition), build_strip(settings.strip)

    def drive(day: int) -> Drive:
        path = ("rehearse", plan.name)
        rng = stream(settings.seed, *path, "world", day)
        world = build_world(plan, rng, conditions, robot_radius_m=settings.robot_radius_m)
        rng = stream(settings.seed, *path, "drive", day)
        return rehearse(world, strip, rng, settings.rows, f"{plan.name}-{day}")

    return lambda index: (plan, map(drive, range(settings.drives)))

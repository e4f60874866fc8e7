"""What a study is made on: invented sites, a plan of the user's with simulated drives, or recorded ones."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from learnfilter.ablation.study import Arena
from learnfilter.app.build import build_conditions, build_plan, build_strip, check_invented
from learnfilter.app.config import SiteConfig, hold
from learnfilter.app.grounds import Place, Rehearsal, drives_on, make_places
from learnfilter.app.lattices import Lattices, build_lattices
from learnfilter.app.recipes import BlocksConfig, StudyConfig
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.errors import DriveError
from learnfilter.drives.tables import read_drive
from learnfilter.plan import FloorPlan
from learnfilter.sim.conditions import Conditions

# A single plan stands for a dozen invented sites with two drives each.
DRIVES_ON_ONE_PLAN = 12
AS_RECORDED = "as recorded"


@dataclass(frozen=True)
class Subject:
    """What models are judged on.

    Attributes:
        places: makes the sites, one after the other, each with the name of its condition.
        count: how many there are.
        title: in words.
        cache: folder for renderings of the user's plan; None for invented ones.
    """

    places: Callable[[], Iterator[tuple[str, Place]]]
    count: int
    title: str
    cache: Path | None = None


def arena_of(
    condition: str, place: Place, common: Lattices, others: Sequence[Lattices], cache: Path | None
) -> Arena:
    """A place laid on the common lattice, and on those of contenders that have their own."""
    left, bottom, right, top = place.plan.bounds
    return Arena(
        condition,
        common.ground(common.render(place.plan, cache), place.drives),
        {own: own.ground(own.render(place.plan, cache), place.drives) for own in others if own != common},
        place.fold,
        ((left + right) / 2, (bottom + top) / 2),
        place.units,
        tuple(zip(place.worlds, place.drives, strict=False)),
    )


def study_subject(
    settings: TrainConfig,
    site: SiteConfig,
    conditions: Mapping[str, object],
    study: StudyConfig,
    seed: int,
    recorded: Sequence[str] = (),
    blocks: BlocksConfig | None = None,
) -> Subject:
    """Say what models are judged on.

    Args:
        settings: of the training run: sensor, lattice.
        site: families to invent from, or the user's plan.
        conditions: name -> ConditionConfig, for simulated drives.
        study: how much.
        seed: of what is invented.
        recorded: drive tables on `site.file`.
        blocks: which rows of them are judged, each as a start; None for whole drives.

    Raises:
        DriveError: a recorded drive has another number of columns than the models' sensor.
    """
    named = {name: build_conditions(condition) for name, condition in conditions.items()}
    if site.file is None:
        return _invented(settings, site, named, study, seed)
    plan, cache = build_plan(site), Path(settings.runs) / "cache"
    if recorded:
        hold("study.oracle", not study.oracle, "false: nobody knows all of a recorded drive", study.oracle)
        place = recorded_place(settings, plan, recorded, blocks, every_start=True)
        title = f"{len(place.drives)} recorded drives on {plan.name}"
        return Subject(lambda: iter([(AS_RECORDED, place)]), 1, title, cache)
    strip, radius_m = build_strip(settings.strip), build_lattices(settings).robot_radius_m
    count = study.drives * DRIVES_ON_ONE_PLAN

    def places() -> Iterator[tuple[str, Place]]:
        for name, condition in named.items():
            yield name, drives_on(plan, strip, condition, count, study.rows, seed, radius_m)

    return Subject(places, len(named), f"{count} simulated drives on {plan.name}", cache)


def _invented(
    settings: TrainConfig, site: SiteConfig, named: Mapping[str, Conditions], study: StudyConfig, seed: int
) -> Subject:
    check_invented(site)
    strip, radius_m = build_strip(settings.strip), build_lattices(settings).robot_radius_m

    def places() -> Iterator[tuple[str, Place]]:
        for name, condition in named.items():
            rehearsal = Rehearsal(
                tuple(site.families), study.sites, study.drives, study.rows, 0,
                site.width_m, site.depth_m, condition,
            )  # fmt: skip
            for place in make_places(rehearsal, strip, radius_m, seed, "test"):
                yield name, place

    title = f"{study.sites} invented sites, none seen in training"
    return Subject(places, len(named) * study.sites, title)


def recorded_place(
    settings: TrainConfig,
    plan: FloorPlan,
    paths: Sequence[str],
    blocks: BlocksConfig | None,
    every_start: bool,
) -> Place:
    """Recorded drives, whole or cut to blocks.

    Args:
        settings: of the models' training run.
        plan: where they were driven.
        paths: drive tables.
        blocks: which rows are used.
        every_start: whether each row of a block begins a drive of its own, to the block's end.

    Raises:
        DriveError: a drive has another number of columns than the models' sensor, or no row is used.
    """
    strip = build_strip(settings.strip)
    drives, units = [], []
    for path in paths:
        whole = read_drive(path, strip, depth_kind=settings.strip.depth_kind)
        for start, end in _stretches(len(whole), blocks, every_start):
            drives.append(whole.part(start, end))
            units.append(f"{whole.name}, to row {end}")
    if not drives:
        raise DriveError("no row lies in the blocks", place="blocks", got=blocks)
    return Place(plan, tuple(drives), units=tuple(units))


def _stretches(rows: int, blocks: BlocksConfig | None, every_start: bool) -> Iterator[tuple[int, int]]:
    """First row and end of every stretch that is used."""
    if blocks is None:
        yield 0, rows
        return
    for block in range(blocks.first, -(-rows // blocks.rows), blocks.every):
        begin, end = block * blocks.rows, min(rows, (block + 1) * blocks.rows)
        for start in range(begin, end if every_start else begin + 1):
            yield start, end

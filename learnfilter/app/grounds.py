"""Hand the simulator to whoever needs sites to train or be judged on."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import torch

from learnfilter.app.config import MotionConfig
from learnfilter.app.lattices import Lattices
from learnfilter.core.poses import between, compose
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import Ground, Truth, truth_of
from learnfilter.filtering.motion import MotionSettings
from learnfilter.filtering.rollout import lay_strips
from learnfilter.observe.contract import Strips
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.render.site import Site
from learnfilter.sim import drawn_family, fold_of
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.driver import free_poses
from learnfilter.sim.rehearse import rehearse, rehearse_site
from learnfilter.sim.sensor import sense
from learnfilter.sim.world import World, build_world


def build_motion(settings: MotionConfig) -> MotionSettings:
    """Spreads of odometry that tuning starts from."""
    return MotionSettings(
        settings.turn_from_turn,
        settings.turn_from_travel,
        settings.travel_from_travel,
        settings.travel_from_turn,
    )


@dataclass(frozen=True)
class Rehearsal:
    """What to make up.

    Attributes:
        families: drawn in turn.
        sites: how many sites.
        drives, rows: drives a site and strips a drive.
        stills: strips a site at uniform free poses; a new day every `STILLS_A_DAY` of them.
        width_m, depth_m: size of the sites.
        conditions: how the days differ from the plan.
    """

    families: tuple[str, ...]
    sites: int
    drives: int
    rows: int
    stills: int
    width_m: float
    depth_m: float
    conditions: Conditions


class Place(NamedTuple):
    """A site with drives, not yet laid on any lattice.

    Attributes:
        plan: what the robot is given.
        drives: what it drove there.
        worlds: what was there on each drive; empty where nobody knows (recorded drives).
        fold, units: see `ablation.study.Arena`.
    """

    plan: FloorPlan
    drives: tuple[Drive, ...]
    worlds: tuple[World, ...] = ()
    fold: int = 1
    units: tuple[str, ...] = ()


STILLS_A_DAY = 64  # one furnishing serves so many strips: fewer costs set-up, more repeats furniture


def make_stills(
    plan: FloorPlan, site: Site, strip: Strip, conditions: Conditions, count: int, seed: int, radius_m: float
) -> tuple[Strips, Truth]:
    """Strips at poses drawn uniformly from the floor, each day furnished and lit anew."""
    parts, poses = [], []
    for day in range(-(-count // STILLS_A_DAY)):
        path = ("stills", plan.name, day)
        world = build_world(plan, stream(seed, *path, "world"), conditions, robot_radius_m=radius_m)
        rng = stream(seed, *path, "poses")
        robot = free_poses(world, rng, min(STILLS_A_DAY, count - day * STILLS_A_DAY))
        drive = _as_drive(world, robot, strip, rng)
        parts.append(lay_strips(drive, site.layout, np.arange(len(drive))))
        poses.append(drive.sensor_reference())
    strips = Strips(
        torch.cat([part.depth_m for part in parts]), torch.cat([part.rgb for part in parts]), parts[0].present
    )
    return strips, truth_of(site, np.concatenate(poses))


def _as_drive(world: World, robot: np.ndarray, strip: Strip, rng: np.random.Generator) -> Drive:
    """Independent poses as the drive of a robot that leaps between them."""
    time_s = np.arange(len(robot), dtype=float)
    depth, rgb = sense(world, compose(robot, strip.mount), time_s, strip, rng)
    reference = world.on_plan(robot)
    odometry = np.vstack([np.zeros(3), between(reference[:-1], reference[1:])])
    return Drive(time_s, odometry, depth, rgb if strip.has_colour else None, reference, strip, "stills")


def make_places(
    rehearsal: Rehearsal, strip: Strip, radius_m: float, seed: int, purpose: str
) -> Iterator[Place]:
    """Invent sites and drive on them; `purpose` (train, validation, test) keeps their seeds apart."""
    base = base_seed(seed, purpose)
    for number in range(rehearsal.sites):
        family = rehearsal.families[number % len(rehearsal.families)]
        made = rehearse_site(
            base, family, rehearsal.conditions, strip, rehearsal.rows, rehearsal.drives,
            rehearsal.width_m, rehearsal.depth_m, index=number, robot_radius_m=radius_m,
        )  # fmt: skip
        yield Place(made.plan, made.drives, made.worlds, fold_of(drawn_family(family, rehearsal.conditions)))


def base_seed(seed: int, purpose: str) -> int:
    """Seed of everything invented for a purpose."""
    return int(stream(seed, "grounds", purpose).integers(2**31))


def lay(
    place: Place, lattices: Lattices, strip: Strip, rehearsal: Rehearsal, seed: int, purpose: str
) -> Ground:
    """A place on a lattice, with as many stills as the rehearsal asks for."""
    site = lattices.render(place.plan)
    stills = None
    if rehearsal.stills:
        stills = make_stills(
            place.plan, site, strip, rehearsal.conditions, rehearsal.stills, base_seed(seed, purpose),
            lattices.robot_radius_m,
        )  # fmt: skip
    return lattices.ground(site, place.drives, stills)


def drives_on(
    plan: FloorPlan,
    strip: Strip,
    conditions: Conditions,
    drives: int,
    rows: int,
    seed: int,
    radius_m: float,
) -> Place:
    """Simulated drives on a plan of the user's, each on another day."""
    made, worlds = [], []
    for day in range(drives):
        world = build_world(
            plan, stream(seed, "drives on", day, "world"), conditions, robot_radius_m=radius_m
        )
        rng = stream(seed, "drives on", day, "drive")
        made.append(rehearse(world, strip, rng, rows, f"{plan.name}-{day}"))
        worlds.append(world)
    # on a single site the drives are what is independent
    return Place(plan, tuple(made), tuple(worlds), units=tuple(drive.name for drive in made))

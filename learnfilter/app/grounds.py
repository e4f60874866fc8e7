"""Hand the simulator to whoever needs sites to train or be judged on."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import NamedTuple

import numpy as np
import torch

from learnfilter.app.build import build_strip
from learnfilter.app.config import MotionConfig
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.poses import between, compose
from learnfilter.core.seeds import stream
from learnfilter.core.strip import RingLayout, Strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import Ground, Truth, course_of, truth_of
from learnfilter.filtering.motion import MotionSettings
from learnfilter.filtering.rollout import lay_strips
from learnfilter.observe.contract import Strips
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.render import cached_site, grid_for, render_site
from learnfilter.render.site import Site
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.driver import free_poses
from learnfilter.sim.rehearse import rehearse, rehearse_site
from learnfilter.sim.sensor import sense
from learnfilter.sim.world import World, build_world


@dataclass(frozen=True)
class Lattices:
    """How plans are laid on lattices: the plain values of the grid and motion configs.

    Attributes:
        layout: how strips lie on rings.
        cell_m, headings: of the lattice.
        robot_radius_m, max_range_m, windows: see render.render_site.
        after_m, after_rad: see filtering.rollout.weighed_steps.
    """

    layout: RingLayout
    cell_m: float
    headings: int
    robot_radius_m: float
    max_range_m: float
    windows: str
    after_m: float
    after_rad: float

    def render(self, plan: FloorPlan, cache: Path | None = None) -> Site:
        """The plan's site; kept in and taken from the folder `cache` where one is given."""
        render = render_site if cache is None else partial(cached_site, cache)
        return render(
            plan,
            self.layout,
            grid_for(plan, self.headings, self.cell_m),
            robot_radius_m=self.robot_radius_m,
            max_range_m=self.max_range_m,
            windows=self.windows,
        )

    def ground(
        self, site: Site, drives: Sequence[Drive], stills: tuple[Strips, Truth] | None = None
    ) -> Ground:
        """A site with drives cut to courses."""
        return Ground(site, tuple(course_of(d, site, self.after_m, self.after_rad) for d in drives), stills)


def build_motion(settings: MotionConfig) -> MotionSettings:
    """Spreads of odometry that tuning starts from."""
    return MotionSettings(
        settings.turn_from_turn,
        settings.turn_from_travel,
        settings.travel_from_travel,
        settings.travel_from_turn,
    )


def build_lattices(settings: TrainConfig) -> Lattices:
    """How plans are laid on lattices for the sensor."""
    grid, motion = settings.grid, settings.motion
    return Lattices(
        lay_on_ring(build_strip(settings.strip), grid.headings, grid.bearings_per_heading),
        grid.cell_m,
        grid.headings,
        grid.robot_radius_m,
        settings.strip.max_range_m,
        grid.windows,
        motion.weigh_after_m,
        motion.weigh_after_rad,
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


class Invented(NamedTuple):
    """Invented sites ready for filters, with the plans and drives they were made from."""

    grounds: tuple[Ground, ...]
    plans: tuple[FloorPlan, ...]
    drives: tuple[tuple[Drive, ...], ...]


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


def make_grounds(
    rehearsal: Rehearsal,
    strip: Strip,
    lattices: Lattices,
    seed: int,
    purpose: str,
    tick: Callable[[int, int, str], None],
) -> Invented:
    """Invent sites and drive on them; `purpose` (train, validation, test) keeps their seeds apart."""
    grounds, plans, all_drives = [], [], []
    base = int(stream(seed, "grounds", purpose).integers(2**31))
    for number in range(rehearsal.sites):
        family = rehearsal.families[number % len(rehearsal.families)]
        plan, drives = rehearse_site(
            base, family, rehearsal.conditions, strip, rehearsal.rows, rehearsal.drives,
            rehearsal.width_m, rehearsal.depth_m, index=number, robot_radius_m=lattices.robot_radius_m,
        )  # fmt: skip
        site = lattices.render(plan)
        stills = None
        if rehearsal.stills:
            stills = make_stills(
                plan, site, strip, rehearsal.conditions, rehearsal.stills, base, lattices.robot_radius_m
            )
        grounds.append(lattices.ground(site, drives, stills))
        plans.append(plan)
        all_drives.append(drives)
        tick(number + 1, rehearsal.sites, "")
    return Invented(tuple(grounds), tuple(plans), tuple(all_drives))


def drives_on(
    plan: FloorPlan,
    strip: Strip,
    conditions: Conditions,
    drives: int,
    rows: int,
    seed: int,
    radius_m: float,
    tick: Callable[[int, int, str], None],
) -> tuple[Drive, ...]:
    """Simulated drives on a plan of the user's, each on another day."""
    made = []
    for day in range(drives):
        world = build_world(
            plan, stream(seed, "drives on", day, "world"), conditions, robot_radius_m=radius_m
        )
        rng = stream(seed, "drives on", day, "drive")
        made.append(rehearse(world, strip, rng, rows, f"{plan.name}-{day}"))
        tick(day + 1, drives, "")
    return tuple(made)

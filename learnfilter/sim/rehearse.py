"""Simulated drives: a site, its world, a driver, a sensor and wheels, all from one seed."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from learnfilter.core.poses import compose
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.driver import explore
from learnfilter.sim.families import SIZES_M, UNSEEN_FAMILY, make_plan
from learnfilter.sim.odometry import measure_odometry
from learnfilter.sim.sensor import sense
from learnfilter.sim.world import ROBOT_RADIUS_M, World, build_world

# Share of sites whose plan does not say how surfaces look.
WITHOUT_FINISHES_SHARE = 0.2
# Width and depth of an unseen layout, as parts of those asked for.
UNSEEN_PROPORTIONS = (3 / 2, 2 / 3)


class Rehearsed(NamedTuple):
    """An invented site.

    Attributes:
        plan: what the robot is given.
        drives: through the site, each on another day.
        worlds: [one a drive] what stood there that day, which the robot is never told.
    """

    plan: FloorPlan
    drives: tuple[Drive, ...]
    worlds: tuple[World, ...]


def rehearse(
    world: World,
    strip: Strip,
    rng: np.random.Generator,
    rows: int,
    name: str = "rehearsal",
) -> Drive:
    """Drive once through a world.

    Way, wheels and sensor draw from streams of their own.  Where the conditions park the robot, its
    rows while parked come before the others.

    Args:
        world: where, and under which conditions.
        strip: the sensor and its declared mount.
        rng: draws the drive.
        rows: strips of the moving robot.
        name: of the drive.

    Returns:
        A drive whose reference is the robot's true pose as it reads on the plan.

    Raises:
        PlanError: nowhere is room for the robot.
    """
    conditions = world.conditions
    way, wheels, sensor = rng.spawn(3)
    poses, time_s = explore(world, way, rows)
    parked = round(conditions.parked_s * conditions.parked_rate_hz)
    waiting = np.arange(parked) / conditions.parked_rate_hz
    poses = np.vstack([np.repeat(poses[:1], parked, axis=0), poses])
    time_s = np.append(waiting, parked / conditions.parked_rate_hz + time_s)
    depth_m, rgb = sense(world, compose(poses, strip.mount), time_s, strip, sensor)
    odometry = measure_odometry(
        poses,
        wheels,
        noise_scale=conditions.odometry_noise_scale,
        travel_scale=conditions.odometry_scale,
    )
    return Drive(
        time_s=time_s,
        odometry=odometry,
        depth_m=depth_m,
        rgb=rgb if strip.has_colour else None,
        reference=world.on_plan(poses),
        strip=strip,
        name=name,
        site=world.plan.name,
    )


def drawn_family(family: str, conditions: Conditions) -> str:
    """The family that is drawn where this one is asked for."""
    return UNSEEN_FAMILY if conditions.family == "unseen" else family


def rehearse_site(
    seed: int,
    family: str,
    conditions: Conditions,
    strip: Strip,
    rows: int,
    n_drives: int,
    width_m: float = 12.0,
    depth_m: float = 12.0,
    *,
    index: int = 0,
    without_finishes: float = WITHOUT_FINISHES_SHARE,
    robot_radius_m: float = ROBOT_RADIUS_M,
) -> Rehearsed:
    """One invented site and drives through it, fully determined by seed, family, index and conditions.

    The layout is the same under all conditions but an unseen layout or family.  Each drive meets the site
    on another day: other furniture, doors, light and people.

    Args:
        seed, family, index: which site.
        conditions: how the drives differ from the plan.
        strip: the sensor.
        rows: strips a drive.
        n_drives: drives on the site.
        width_m, depth_m: size of the site.
        without_finishes: share of sites whose plan names no finishes.
        robot_radius_m: of the robot.

    Returns:
        What the robot is given, its drives and their worlds.  Plan and drives are named after seed,
        family and index under any conditions.

    Raises:
        ConfigError: unknown family or a size out of range.
    """
    path = ("rehearse", family, index)
    layout: tuple[str, ...] = ("plan",)
    if conditions.layout == "unseen":
        sizes = np.multiply(UNSEEN_PROPORTIONS, (width_m, depth_m))
        width_m, depth_m = (float(size) for size in np.clip(sizes, *SIZES_M))
        layout = ("unseen", "plan")
    plan = make_plan(
        drawn_family(family, conditions),
        stream(seed, *path, *layout),
        width_m,
        depth_m,
        palette=conditions.finishes,
        with_finishes=stream(seed, *path, "finishes").random() >= without_finishes,
        name=f"{family}-{seed}-{index}",
    )
    worlds = tuple(
        build_world(plan, stream(seed, *path, "world", day), conditions, robot_radius_m=robot_radius_m)
        for day in range(n_drives)
    )
    drives = tuple(
        rehearse(world, strip, stream(seed, *path, "drive", day), rows, f"{plan.name}-{day}")
        for day, world in enumerate(worlds)
    )
    return Rehearsed(plan, drives, worlds)

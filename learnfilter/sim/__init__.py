"""Invented sites and simulated drives.  Only app, scripts and tests reach it."""

from learnfilter.sim.conditions import Conditions
from learnfilter.sim.driver import explore, free_poses
from learnfilter.sim.families import FAMILIES, fold_of, make_plan
from learnfilter.sim.odometry import OdometryNoise, measure_odometry
from learnfilter.sim.rehearse import Rehearsed, drawn_family, rehearse, rehearse_site
from learnfilter.sim.sensor import sense
from learnfilter.sim.world import World, build_world

__all__ = [
    "FAMILIES",
    "Conditions",
    "OdometryNoise",
    "Rehearsed",
    "World",
    "build_world",
    "drawn_family",
    "explore",
    "fold_of",
    "free_poses",
    "make_plan",
    "measure_odometry",
    "rehearse",
    "rehearse_site",
    "sense",
]

"""Trained models on sites that no training has seen, as robots run them."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from _runs import train

from learnfilter.app.build import build_strip
from learnfilter.app.models import LEARNED, Stored, settings_of, stored
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.drives.drive import Drive
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.runtime import Estimate, Localizer
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.rehearse import rehearse_site

FAMILIES = ("offices", "aisles", "hall", "partitions")
SITE_SEED = 9_000  # of sites that no training draws


def matcher(seed: int) -> tuple[TrainConfig, Stored]:
    """The learned model of a training seed, with the settings it was trained with."""
    folder, _ = train("seed", seed)
    settings = settings_of(folder)
    return settings, stored(folder, settings)[LEARNED]


def site(number: int, rows: int, drives: int, settings: TrainConfig) -> tuple[FloorPlan, tuple[Drive, ...]]:
    """An invented site and drives on it."""
    family, strip = FAMILIES[number % len(FAMILIES)], build_strip(settings.strip)
    made = rehearse_site(
        SITE_SEED, family, Conditions(), strip, rows, drives, index=number,
        robot_radius_m=settings.grid.robot_radius_m,
    )  # fmt: skip
    return made.plan, made.drives


def steps(localizer: Localizer, drive: Drive, begin: int = 0, end: int | None = None) -> Iterator[Estimate]:
    """Answers along some rows of a drive, to whose first it was carried: the wheels say nothing."""
    for row in range(begin, len(drive) if end is None else end):
        rgb = None if drive.rgb is None else drive.rgb[row]
        yield localizer.step(drive.odometry[row] if row > begin else np.zeros(3), drive.depth_m[row], rgb)

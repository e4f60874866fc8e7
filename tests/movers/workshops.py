"""The two workshops of toy_worlds/, rendered, with an analytic model and the starts whose answer is known."""

import csv
from functools import cache
from pathlib import Path
from typing import NamedTuple

import numpy as np

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import ColourFit, ColourModel
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.mixture import RangeMixture
from learnfilter.plan import read_plan
from learnfilter.render import grid_for, render_site
from learnfilter.runtime.moves import Motion

TOYS = Path(__file__).resolve().parents[2] / "toy_worlds"
MIDDLE = (5.0, 2.0)
REACH_M, HEADINGS = 6.0, 32
STRIP = Strip(even_strip(-43.59375, 2.8125, 32), 0.15, REACH_M)
LAYOUT = lay_on_ring(STRIP, HEADINGS, 4)


class Start(NamedTuple):
    """A pose, and the motion that tells it from its twin."""

    pose: np.ndarray
    best: Motion


def starts() -> list[Start]:
    """As written beside the plan."""
    with (TOYS / "two_workshops_starts.csv").open(encoding="utf-8") as file:
        rows = [{key: float(value) for key, value in row.items()} for row in csv.DictReader(file)]
    return [
        Start(
            np.array([row["x_m"], row["y_m"], np.radians(row["heading_deg"])]),
            Motion(row["forward_m"], 0.0, np.radians(row["turn_deg"])),
        )
        for row in rows
    ]


def plan():
    return read_plan(TOYS / "two_workshops.geojson")


@cache
def site():
    grid = grid_for(plan(), HEADINGS, 0.25)
    return render_site(plan(), LAYOUT, grid, robot_radius_m=0.25, max_range_m=REACH_M)


@cache
def model() -> Blend:
    """Beam and colour, of a plausible fit."""
    scale = RangeScale(0.05, 0.02, REACH_M)
    background = np.random.default_rng(0).normal(-1.5, 0.6, (200, 3))
    parts = {
        "beam": BeamModel(LAYOUT, scale, MixtureFit(RangeMixture(), np.ones(scale.nodes + 1), ())),
        "colour": ColourModel(LAYOUT, ColourFit(0.35, 3.0, 0.5, -1.5, background)),
    }
    return Blend(parts, dict.fromkeys(parts, 0.3))

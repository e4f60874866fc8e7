"""A small invented site, strips and one of every observation model, for laws that all must obey."""

from dataclasses import replace
from functools import cache

import numpy as np
import torch

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import ColourFit, ColourModel, log_colour
from learnfilter.observe.contract import Strips
from learnfilter.observe.endpoint import EndpointFit, EndpointModel
from learnfilter.observe.factors import factor_colour, factor_range
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.observe.mixture import RangeMixture
from learnfilter.plan.floorplan import DOOR, NO_FINISH, SHUT, UNKNOWN, WALL, Finish, FloorPlan
from learnfilter.render import grid_for, render_site

MAX_RANGE_M = 6.0
HEADINGS, PER_HEADING = 16, 2
CIRCLE = Strip(even_strip(-170.0, 11.25, 32), 0.1, MAX_RANGE_M)
LAYOUT = lay_on_ring(CIRCLE, HEADINGS, PER_HEADING)
# the same ring under half as many headings: fine enough for two looks within each
TWO_LOOKS = lay_on_ring(CIRCLE, HEADINGS // 2, 2 * PER_HEADING)
FINE, COARSE = RangeScale(0.05, 0.02, MAX_RANGE_M), RangeScale(0.15, 0.06, MAX_RANGE_M)
FINISHES = (Finish("chalk", (0.9, 0.9, 0.88)), Finish("brick", (0.6, 0.2, 0.15)))


@cache
def small_plan():
    """6 x 6 m without a symmetry: chalk and brick, an inner wall nobody described, an unknown door."""
    rows = [
        (0, 0, 6, 0, WALL, SHUT, 0),
        (6, 0, 6, 2, WALL, SHUT, 1),
        (6, 2, 6, 3, DOOR, UNKNOWN, NO_FINISH),
        (6, 3, 6, 6, WALL, SHUT, 1),
        (6, 6, 0, 6, WALL, SHUT, 0),
        (0, 6, 0, 0, WALL, SHUT, 0),
        (1.5, 4, 4, 4, WALL, SHUT, NO_FINISH),
        (4, 4, 4, 2.5, WALL, SHUT, 1),
    ]
    segments, kind, state, finish = (
        np.array([r[:4] for r in rows], float),
        *zip(*(r[4:] for r in rows), strict=True),
    )
    return FloorPlan(
        segments, kind, state, finish, np.arange(len(rows)), FINISHES, seed=(1.0, 1.0), name="small"
    )


def render(plan, layout=LAYOUT, cell_m=0.5):
    """A plan on the lattice all small tests use."""
    grid = grid_for(plan, layout.bearings // layout.bearings_per_heading, cell_m)
    return render_site(plan, layout, grid, robot_radius_m=0.2, max_range_m=MAX_RANGE_M)


@cache
def small_site(layout=LAYOUT):
    """The small plan rendered for the full-circle strip."""
    return render(small_plan(), layout)


def strips(seed=0, count=3, layout=LAYOUT, missing=0.1):
    """Strips of random depth and colour, some readings missing, some colours too."""
    rng = np.random.default_rng(seed)
    depth = rng.uniform(0.2, MAX_RANGE_M, (count, layout.columns))
    rgb = rng.uniform(0, 1, (count, layout.columns, 3))
    depth[rng.random(depth.shape) < missing] = np.nan
    rgb[rng.random(depth.shape) < missing] = np.nan
    return Strips(
        torch.tensor(depth, dtype=torch.float32),
        torch.tensor(rgb, dtype=torch.float32),
        torch.tensor(layout.present()),
    )


@cache
def colour_fit():
    """A colour model whose background is broad; half of a strip's brightness is taken out."""
    background = log_colour(np.random.default_rng(1).uniform(0, 1, (256, 3)))
    return ColourFit(0.5, 3.0, 0.5, float(background.mean()), background)


@cache
def mixture_fit(scale):
    """Default mixture under an even background."""
    return MixtureFit(RangeMixture(), np.ones(scale.nodes + 1), ())


def birth(range_rank=12, colour_rank=8):
    """An analytic start from the same mixture and colour model."""
    colour = colour_fit()
    palette = log_colour(small_site().palette.astype(float))
    return Birth(
        COARSE,
        factor_range(COARSE, mixture_fit(COARSE), range_rank),
        factor_colour(colour, palette, colour_rank),
        colour.weight,
        colour.spread,
        colour.level_power,
        colour.level,
        0.4,
        0.3,
    )


def beam(layout=LAYOUT):
    return BeamModel(layout, FINE, mixture_fit(FINE))


def endpoint(layout=LAYOUT):
    return EndpointModel(layout, MAX_RANGE_M, EndpointFit())


def colour(layout=LAYOUT):
    return ColourModel(layout, colour_fit())


def blend(layout=LAYOUT):
    return Blend({"beam": beam(layout), "colour": colour(layout)}, {"beam": 0.4, "colour": 0.3})


def untrained(layout=LAYOUT):
    return Matcher(layout, birth(), MatcherShape(), torch.Generator().manual_seed(0))


def trained(layout=LAYOUT):
    """A matcher as training might leave it: every weight moved at random."""
    model, generator = untrained(layout), torch.Generator().manual_seed(1)
    with torch.no_grad():
        for parameter in model.parameters():
            parameter.add_(0.1 * torch.randn(parameter.shape, generator=generator))
    return model


MODELS = {
    "beam": beam,
    "endpoint": endpoint,
    "colour": colour,
    "blend": blend,
    "matcher": untrained,
    "trained matcher": trained,
}


def score(model, strips_, site):
    """[b n h] of a model, without a graph."""
    with torch.no_grad():
        return model(strips_, site)


def altered(site, **members):
    """The site with other rings."""
    return replace(site, **members)

"""Fit and tune the analytic models: the opponents, and what a matcher is born from."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.filtering.course import Ground, sample_of
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import ColourFit, ColourModel, fit_colour, log_colour
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.endpoint import EndpointFit, EndpointModel, fit_end_points
from learnfilter.observe.factors import factor_colour, factor_range
from learnfilter.observe.fitting import MixtureFit, fit_mixture, gather_pairs
from learnfilter.observe.matcher import Birth
from learnfilter.observe.mixture import RangeMixture

# Nodes of the table that is looked up, 5 cm at zero: halving it changes no figure we have seen.
FINE_FIRST_M, FINE_GROWTH = 0.05, 0.02
# Where tuning begins.  Independent columns would be 1; every tuned exponent so far lies below 0.3.
FIRST_EXPONENT = 0.3
# Of features that know nothing: most waves over all nodes, and their weight.
WAVES, FAINT = 4.0, 0.02


class Fits(NamedTuple):
    """Analytic models fitted to drives.

    Attributes:
        scale: fine nodes of the beam table.
        mixture: fitted range mixture on those nodes.
        endpoint: fitted end-point model.
        colour: fitted colour model; None where strips or plans have no colour.
        ranges: [k] expected range of every column fitted to, inf beyond reach.
        finishes: [f 3] log linear colours of the finishes met.
    """

    scale: RangeScale
    mixture: MixtureFit
    endpoint: EndpointFit
    colour: ColourFit | None
    ranges: NDArray[np.float64]
    finishes: NDArray[np.float64]


def fit_analytic(grounds: Sequence[Ground], max_range_m: float, rng: np.random.Generator) -> Fits:
    """Fit mixture, end points and colour to the courses of all grounds."""
    samples = [sample_of(g.site, c.steps.strips, c.truth) for g in grounds for c in g.courses]
    pairs = gather_pairs(samples)
    scale = RangeScale(FINE_FIRST_M, FINE_GROWTH, max_range_m)
    finishes = np.concatenate([g.site.palette.reshape(-1, 3) for g in grounds])
    return Fits(
        scale,
        fit_mixture(pairs, scale, RangeMixture()),
        fit_end_points(samples, max_range_m),
        fit_colour(pairs, rng),
        pairs.expected_m,
        np.unique(log_colour(finishes), axis=0),
    )


def make_blend(kind: str, layout: RingLayout, fits: Fits) -> Blend:
    """An untuned blend: 'beam', 'endpoint', 'beam+colour' or 'endpoint+colour'.

    Raises:
        ConfigError: an unknown kind, or colour where none was fitted.
    """
    makers = {
        "beam": lambda: BeamModel(layout, fits.scale, fits.mixture),
        "endpoint": lambda: EndpointModel(layout, fits.scale.max_range_m, fits.endpoint),
        "colour": lambda: ColourModel(layout, fits.colour) if fits.colour else None,
    }
    names = kind.split("+")
    parts: dict[str, ObservationModel] = {
        name: part for name in names if name in makers and (part := makers[name]()) is not None
    }
    if len(parts) < len(names):
        known = [name for name in makers if name != "colour" or fits.colour]
        raise ConfigError("no such analytic model", place="models", expected=" + ".join(known), got=kind)
    return Blend(parts, dict.fromkeys(parts, FIRST_EXPONENT))


@dataclass(frozen=True)
class BirthSettings:
    """Ranks of a matcher's analytic start.

    Attributes:
        first_m, growth: nodes of its range features.
        range_rank, colour_rank: features kept; zero leaves the analytic start out.
    """

    first_m: float = 0.05
    growth: float = 0.02
    range_rank: int = 20
    colour_rank: int = 10


def birth_of(tuned: Blend, fits: Fits, settings: BirthSettings) -> Birth:
    """What a matcher is born from: the tuned beam, with colour where the blend has it."""
    scale = RangeScale(settings.first_m, settings.growth, fits.scale.max_range_m)
    node = np.where(
        fits.ranges <= scale.max_range_m,
        np.rint(scale.position(np.minimum(fits.ranges, scale.max_range_m))).clip(0, scale.nodes - 1),
        scale.nodes,
    ).astype(int)
    weight = np.bincount(node, minlength=scale.nodes + 1).astype(np.float64) + 1.0
    coarse = MixtureFit(fits.mixture.mixture, weight, ())
    exponents = {name: float(value.detach().exp()) for name, value in tuned.log_exponent.items()}
    colour = fits.colour if "colour" in exponents else None
    return Birth(
        scale,
        factor_range(scale, coarse, settings.range_rank),
        factor_colour(colour, fits.finishes, settings.colour_rank) if colour else None,
        colour.weight if colour else 0.0,
        colour.spread if colour else 1.0,
        colour.level_power if colour else 0.0,
        colour.level if colour else 0.0,
        exponents["beam"],
        exponents.get("colour", 1.0),
    )


def without_knowledge(birth: Birth, rng: np.random.Generator) -> Birth:
    """A birth of the same sizes that knows nothing: what the analytic start is worth is learned against it.

    Features of neighbouring nodes stay alike, which is all that ranges and colours have in common with the
    fitted ones; they hardly weigh at birth.
    """

    def smooth(table: NDArray[np.float64]) -> NDArray[np.float64]:
        waves = rng.uniform(0, WAVES, table.shape[1]), rng.uniform(0, 2 * np.pi, table.shape[1])
        places = np.linspace(0, 1, len(table))[:, None]
        return np.cos(2 * np.pi * waves[0] * places + waves[1])

    ranges, colours = birth.range_factors, birth.colour_factors
    return birth._replace(
        range_factors=ranges._replace(
            measured=smooth(ranges.measured),
            expected=np.vstack([smooth(ranges.expected[:-1]), ranges.expected[-1:]]),  # unsure stays silent
            bias=np.zeros_like(ranges.bias),
        ),
        colour_factors=colours
        and colours._replace(
            root=rng.normal(size=colours.root.shape), background=np.zeros_like(colours.background)
        ),
        range_exponent=FAINT,
        colour_exponent=FAINT,
    )

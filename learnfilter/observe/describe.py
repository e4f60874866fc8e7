"""Models as plain facts and tensors, and back: what a model file or a bundle holds.

One line a kind in KINDS; a new observation model adds its line.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any, NamedTuple

import numpy as np
import torch
from torch import Tensor

from learnfilter.core.errors import InputError
from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import ColourFit, ColourModel
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.endpoint import EndpointFit, EndpointModel
from learnfilter.observe.factors import ColourFactors, RangeFactors
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.observe.mixture import RangeMixture

Facts = dict[str, Any]
Tensors = dict[str, Tensor]


def _describe_beam(model: BeamModel) -> tuple[Facts, Tensors]:
    facts = {"scale": asdict(model.scale), "mixture": asdict(model.fit.mixture)}
    return facts, {"expected_weight": torch.from_numpy(model.fit.expected_weight)}


def _rebuild_beam(layout: RingLayout, facts: Facts, tensors: Tensors) -> BeamModel:
    fit = MixtureFit(RangeMixture(**facts["mixture"]), tensors["expected_weight"].numpy(), ())
    return BeamModel(layout, RangeScale(**facts["scale"]), fit)


def _describe_endpoint(model: EndpointModel) -> tuple[Facts, Tensors]:
    return {"fit": asdict(model.fit), "max_range_m": model.max_range_m}, {}


def _rebuild_endpoint(layout: RingLayout, facts: Facts, tensors: Tensors) -> EndpointModel:
    return EndpointModel(layout, facts["max_range_m"], EndpointFit(**facts["fit"]))


def _describe_colour(model: ColourModel) -> tuple[Facts, Tensors]:
    facts = {k: v for k, v in asdict(model.fit).items() if k != "background"}
    return {"fit": facts}, {"background": torch.from_numpy(np.ascontiguousarray(model.fit.background))}


def _rebuild_colour(layout: RingLayout, facts: Facts, tensors: Tensors) -> ColourModel:
    return ColourModel(layout, ColourFit(**facts["fit"], background=tensors["background"].numpy()))


def _describe_blend(model: Blend) -> tuple[Facts, Tensors]:
    facts: Facts = {"parts": {}}
    tensors = {f"exponent.{name}": value.detach().exp() for name, value in model.log_exponent.items()}
    for name in model.parts:
        facts["parts"][name], part_tensors = describe(model.part(name))
        tensors |= {f"{name}.{key}": value for key, value in part_tensors.items()}
    return facts, tensors


def _rebuild_blend(layout: RingLayout, facts: Facts, tensors: Tensors) -> Blend:
    parts, exponents = {}, {}
    for name, part in facts["parts"].items():
        own = {k[len(name) + 1 :]: v for k, v in tensors.items() if k.startswith(f"{name}.")}
        parts[name] = rebuild(layout, part, own)
        exponents[name] = float(tensors[f"exponent.{name}"])
    return Blend(parts, exponents)


def _describe_matcher(model: Matcher) -> tuple[Facts, Tensors]:
    facts = {"scale": asdict(model.scale), "shape": asdict(model.shape), "ranks": list(model.ranks)}
    return facts, dict(model.state_dict())


def _rebuild_matcher(layout: RingLayout, facts: Facts, tensors: Tensors) -> Matcher:
    scale, range_rank = RangeScale(**facts["scale"]), facts["ranks"][0]
    blank = Birth(
        scale,
        RangeFactors(
            np.zeros((scale.nodes + 1, range_rank)),
            np.zeros((scale.nodes + 2, range_rank)),
            np.zeros(scale.nodes + 2),
        ),
        ColourFactors(
            np.zeros(tensors["landmarks"].shape),
            np.zeros(tensors["root"].shape),
            np.zeros(tensors["background"].shape),
        ),
        *(0.0, 1.0, 0.0, 0.0, 1.0, 1.0),
    )
    model = Matcher(layout, blank, MatcherShape(**facts["shape"]), torch.Generator())
    model.load_state_dict(tensors)
    return model


class _Kind(NamedTuple):
    cls: type[ObservationModel]
    describe: Callable[..., tuple[Facts, Tensors]]
    rebuild: Callable[[RingLayout, Facts, Tensors], ObservationModel]


KINDS: Mapping[str, _Kind] = {
    "beam": _Kind(BeamModel, _describe_beam, _rebuild_beam),
    "endpoint": _Kind(EndpointModel, _describe_endpoint, _rebuild_endpoint),
    "colour": _Kind(ColourModel, _describe_colour, _rebuild_colour),
    "blend": _Kind(Blend, _describe_blend, _rebuild_blend),
    "matcher": _Kind(Matcher, _describe_matcher, _rebuild_matcher),
}


def describe(model: ObservationModel) -> tuple[Facts, Tensors]:
    """Plain facts (with the member `kind`) and tensors that `rebuild` makes the same model from."""
    for kind, entry in KINDS.items():
        if type(model) is entry.cls:
            facts, tensors = entry.describe(model)
            return {"kind": kind, **facts}, tensors
    raise InputError("no such kind of model", expected=" or ".join(KINDS), got=type(model).__name__)


def rebuild(layout: RingLayout, facts: Facts, tensors: Tensors) -> ObservationModel:
    """The model that `describe` described, for strips on `layout`.

    Raises:
        InputError: a kind this version does not know.
    """
    if facts.get("kind") not in KINDS:
        raise InputError("no such kind of model", expected=" or ".join(KINDS), got=facts.get("kind"))
    return KINDS[facts["kind"]].rebuild(layout, facts, tensors)

"""Trained models as the facts and arrays that the robot's models read (`runtime/models.py`)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import InputError
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import DARK, ColourModel
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.endpoint import STEP_M, EndpointModel
from learnfilter.observe.matcher import GATE_LIMIT, Matcher
from learnfilter.runtime.matcher import matcher_layers

Facts = dict[str, Any]
Named = dict[str, NDArray[Any]]


def _beam(model: BeamModel) -> tuple[Facts, Named]:
    return {"scale": asdict(model.scale)}, {"table": model.table}


def _endpoint(model: EndpointModel) -> tuple[Facts, Named]:
    return {"step_m": STEP_M, "max_range_m": model.max_range_m}, {"table": model.table}


def _colour(model: ColourModel) -> tuple[Facts, Named]:
    facts = {name: value for name, value in asdict(model.fit).items() if name != "background"}
    return {**facts, "dark": DARK}, {"background": model.fit.background}


def _blend(model: Blend) -> tuple[Facts, Named]:
    parts: Facts = {}
    arrays: Named = {}
    for name, part in model.parts.items():
        assert isinstance(part, ObservationModel)
        facts, own = robot_model(part)
        parts[name] = {"exponent": float(model.log_exponent[name].detach().exp()), "model": facts}
        arrays |= {f"{name}.{key}": array for key, array in own.items()}
    return {"parts": parts}, arrays


def _matcher(model: Matcher) -> tuple[Facts, Named]:
    facts: Facts = {
        "scale": asdict(model.scale),
        "ranks": list(model.ranks),
        "dark": DARK,
        "gate_limit": GATE_LIMIT,
        **{name: value for name, value in asdict(model.shape).items() if name != "extra_rank"},
    }
    layers = matcher_layers(facts)
    arrays = {name: tensor.detach().numpy() for name, tensor in model.state_dict().items()}
    for layer in layers:  # a linear map is a kernel of one bearing
        weight = arrays[f"{layer.name}.weight"]
        arrays[f"{layer.name}.weight"] = weight.reshape(*weight.shape[:2], layer.kernel)
    return {**facts, "layers": [layer._asdict() for layer in layers]}, arrays


_KINDS: Mapping[type[ObservationModel], tuple[str, Callable[[Any], tuple[Facts, Named]]]] = {
    BeamModel: ("beam", _beam),
    EndpointModel: ("endpoint", _endpoint),
    ColourModel: ("colour", _colour),
    Blend: ("blend", _blend),
    Matcher: ("matcher", _matcher),
}


def robot_model(model: ObservationModel) -> tuple[Facts, Named]:
    """A model's kind with its facts, for the manifest, and its arrays, for the weights.

    Raises:
        InputError: a kind of model the robot cannot run.
    """
    if type(model) not in _KINDS:
        known = " or ".join(name for name, _ in _KINDS.values())
        raise InputError("the robot cannot run this", expected=known, got=type(model).__name__)
    kind, describe = _KINDS[type(model)]
    facts, arrays = describe(model)
    return {kind: facts}, {name: np.asarray(array, order="C") for name, array in arrays.items()}

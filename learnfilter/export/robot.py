"""Trained models as the facts and arrays that the robot's models read (`runtime/models.py`), and back."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from copy import deepcopy
from dataclasses import asdict, replace
from typing import Any, NamedTuple, TypeVar

import numpy as np
import torch
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
Tabled = TypeVar("Tabled", BeamModel, EndpointModel)


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


def _with_table(model: Tabled, arrays: Named) -> Tabled:
    twin = deepcopy(model)
    twin.table = arrays["table"]
    return twin


def _with_background(model: ColourModel, arrays: Named) -> ColourModel:
    return ColourModel(model.layout, replace(model.fit, background=arrays["background"]))


def _with_parts(model: Blend, arrays: Named) -> Blend:
    twin = deepcopy(model)
    for name in model.parts:
        own = {k.removeprefix(f"{name}."): v for k, v in arrays.items() if k.startswith(f"{name}.")}
        twin.parts[name] = with_arrays(model.part(name), own)
    return twin


def _with_state(model: Matcher, arrays: Named) -> Matcher:
    twin = deepcopy(model)
    sizes = {name: tensor.shape for name, tensor in model.state_dict().items()}
    twin.load_state_dict({name: torch.from_numpy(arrays[name]).reshape(sizes[name]) for name in sizes})
    return twin


class _Kind(NamedTuple):
    name: str
    describe: Callable[[Any], tuple[Facts, Named]]
    with_arrays: Callable[[Any, Named], ObservationModel]


_KINDS: Mapping[type[ObservationModel], _Kind] = {
    BeamModel: _Kind("beam", _beam, _with_table),
    EndpointModel: _Kind("endpoint", _endpoint, _with_table),
    ColourModel: _Kind("colour", _colour, _with_background),
    Blend: _Kind("blend", _blend, _with_parts),
    Matcher: _Kind("matcher", _matcher, _with_state),
}


def robot_model(model: ObservationModel) -> tuple[Facts, Named]:
    """A model's kind with its facts, for the manifest, and its arrays, for the weights.

    Raises:
        InputError: a kind of model the robot cannot run.
    """
    if type(model) not in _KINDS:
        known = " or ".join(kind.name for kind in _KINDS.values())
        raise InputError("the robot cannot run this", expected=known, got=type(model).__name__)
    kind = _KINDS[type(model)]
    facts, arrays = kind.describe(model)
    return {kind.name: facts}, {name: np.asarray(array, order="C") for name, array in arrays.items()}


def with_arrays(model: ObservationModel, arrays: Named) -> ObservationModel:
    """A copy of a model with other numbers, named and shaped as `robot_model` names and shapes them."""
    return _KINDS[type(model)].with_arrays(model, arrays)

"""Observation models as graphs, each of a runtime's model with its arrays (`runtime/models.py`)."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import EDGE, RingLayout
from learnfilter.export.onnx_graph import F32, F64, I64, Value
from learnfilter.export.onnx_inputs import Inputs, position
from learnfilter.export.onnx_matcher import matcher
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.matcher import RobotMatcher
from learnfilter.runtime.models import RobotBeam, RobotBlend, RobotColour, RobotEndpoint


def log_likelihood(given: Inputs, model: RobotModel) -> Value:
    """[h n] nats of the strip at the centre of every live cell, for every heading bin."""
    return _pooled(_scores(given, model), given.layout)


def _scores(given: Inputs, model: RobotModel) -> Value:
    """[looks*h n] nats of the strip at every look."""
    return _KINDS[type(model)](given, model)


def _beam(given: Inputs, model: RobotBeam) -> Value:
    """A table of evidence, measured bin against expected node, summed over columns."""
    scale, nodes = model.scale, model.scale.nodes
    beyond = given.range_m > scale.max_range_m
    expected = beyond.where(nodes, _node(given.range_m, scale))
    expected = given.unsure.where(nodes + 1, expected)
    measured = given.depth_m.is_nan().where(nodes, _node(given.depth_m, scale))
    rows = given.graph.constant(model.table).gather(measured) * given.present.cast(F32).spread(1)
    return _sum_along_rings(given, rows, expected)


def _node(range_m: Value, scale: RangeScale) -> Value:
    """The nearest node of the range scale."""
    clipped = range_m.at_least(0.0).at_most(scale.max_range_m)
    return position(clipped, scale).rounded().cast(I64).at_most(scale.nodes - 1)


def _colour(given: Inputs, model: RobotColour) -> Value:
    """A Gaussian kernel between a column's log colour and the finish's, less its normaliser."""
    facts = model.facts
    finishes = (given.palette + facts["dark"]).log()
    background = given.graph.constant(model.background)
    tilt = facts["weight"] * _kernel(background, finishes.cast(F64), facts["spread"])
    seen, x, own = given.log_colour(facts["dark"])
    x = x - facts["level_power"] * (own - facts["level"])
    evidence = facts["weight"] * _kernel(x, finishes, facts["spread"])
    evidence = (evidence.cast(F64) - tilt.exp().mean(0).log()) * seen.cast(F64).spread(1)
    table = evidence.cast(F32).padded((0, 0), (0, 1), F32(0))  # the last, an unknown finish: no evidence
    return _sum_along_rings(given, table, given.finish)


def _kernel(x: Value, y: Value, spread: float) -> Value:
    """[x y] Gaussian kernel of log colours [. 3]."""
    apart = x.spread(1) - y
    return (-0.5 * (apart * apart).sum(2) / spread**2).exp()


def _endpoint(given: Inputs, model: RobotEndpoint) -> Value:
    """A table of evidence over the distance from a column's end to the nearest surface."""
    assert given.cells is not None and given.field_m is not None
    graph, grid, scale = given.graph, given.bundle.site.grid, given.bundle.site.field_scale
    classes = (given.field_m / model.step_m).rounded().at_most(len(model.table) - 1.0).cast(I64)
    margin = math.ceil(model.max_range_m * scale / grid.cell_m) + scale
    around, width = (margin, margin), grid.columns * scale + 2 * margin
    evidence = graph.constant(model.table).gather(classes).padded(around, around, model.table[-1]).shaped(-1)
    corner = ((given.cells * scale + margin) * np.array([width, 1])).sum(1)
    used = ~given.depth_m.is_nan() & given.present
    ends = _end_offsets(given, used.where(given.depth_m.at_most(model.max_range_m), 0.0), width)
    counts = used.cast(F32)

    def add(column: Value, out: Value) -> Value:
        at = ends.gather(column).spread(1) + corner
        return out + evidence.gather(at) * counts.gather(column)

    return _over(given, given.layout.columns, add)


def _end_offsets(given: Inputs, reach_m: Value, width: int) -> Value:
    """[w looks*h] how far on in a field of `width` columns each column ends, see `core.strip.end_offsets`."""
    fine, graph, site = given.layout.finer(), given.graph, given.bundle.site
    bearings = graph.constant(fine.strip_bearings()).spread(1)
    angles = graph.counted(given.looks).cast(F64) * (fine.bearings_per_heading * fine.step_rad) + bearings
    reach = (reach_m.cast(F64) * (site.field_scale / site.grid.cell_m)).spread(1)
    middle = site.field_scale / 2 + EDGE
    rows, columns = ((reach * angles.op(axis) + middle).op("Floor").cast(I64) for axis in ("Sin", "Cos"))
    return rows * width + columns


def _blend(given: Inputs, model: RobotBlend) -> Value:
    """Sum over parts of exponent x log-likelihood."""
    first, *rest = (exponent * _scores(given, part) for exponent, part in model.parts.values())
    return sum(rest, start=first)


_KINDS: Mapping[type[RobotModel], Callable[[Inputs, Any], Value]] = {
    RobotBeam: _beam,
    RobotColour: _colour,
    RobotEndpoint: _endpoint,
    RobotBlend: _blend,
    RobotMatcher: matcher,
}


def _sum_along_rings(given: Inputs, rows: Value, classes: Value) -> Value:
    """[looks*h n] sum over columns of `rows` [w e] at the class [n p] of the bearing each looks at."""
    placed, ring = given.placed(rows), classes.moved(1, 0)

    def add(bearing: Value, out: Value) -> Value:
        return out + placed.gather(bearing).gather(ring.gather(bearing), axis=1)

    return _over(given, given.layout.bearings, add)


def _over(given: Inputs, count: int, add: Callable[[Value, Value], Value]) -> Value:
    """[looks*h n] what `add(i, sum)` adds up; one after the other, for all at once needs far more memory."""
    nothing = given.graph.filled(0.0, F32, given.looks, given.range_m.size(0))
    return given.graph.repeated(given.graph.value(count, I64), add, nothing, given.looks, "n")


def _pooled(scores: Value, layout: RingLayout) -> Value:
    """[h n] log of the mean likelihood over each bin, see `runtime.contract.pool_looks`."""
    if layout.looks == 1:
        return scores
    headings = layout.bearings // layout.bearings_per_heading
    looks = (2 * np.arange(headings) + np.array([[-1], [0], [-2], [1]])) % (2 * headings)
    share = np.array([7 / 16, 7 / 16, 1 / 16, 1 / 16], F32)[:, None, None]
    pooled = scores.gather(looks)
    peak = pooled.max(0)
    return ((pooled - peak).exp() * share).sum(0).log() + peak

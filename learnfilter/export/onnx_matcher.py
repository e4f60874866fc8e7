"""The factored matcher as a graph, the same as `runtime/matcher.py`: a change there must come here."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from learnfilter.export.onnx_graph import F32, F64, I64, Value
from learnfilter.export.onnx_inputs import Inputs, hats
from learnfilter.runtime.layers import Layer
from learnfilter.runtime.matcher import RobotMatcher

BLOCK = 512  # cells whose features are computed at once: more needs memory, fewer is slower


def matcher(given: Inputs, model: RobotMatcher) -> Value:
    """[looks*h n] nats, matrix products: the strip is rolled, not the rings."""
    graph, count = given.graph, given.range_m.size(0)
    asked = given.placed(_phi(given, model)).moved(1, 0, 2).shaped(given.looks, -1)
    palette = _palette_features(given.palette, model)

    def block(turn: Value) -> Value:
        # the last cell fills the last block; what it gives there is left out below
        cells = (turn * BLOCK + graph.counted(BLOCK)).at_most(count - 1)
        rings = {name: getattr(given, name).gather(cells) for name in ("range_m", "unsure", "finish")}
        return asked @ _psi(replace(given, **rings), palette, model).shaped(BLOCK, -1).moved(1, 0)

    blocks = graph.collected((count + BLOCK - 1).op("Div", BLOCK), block, given.looks, BLOCK)
    return blocks.moved(1, 0, 2).shaped(given.looks, -1).gather(graph.counted(count), axis=1)


# ---- the plan's side -------------------------------------------------------------------------------


def _psi(given: Inputs, palette: Value, model: RobotMatcher) -> Value:
    """[n p channels] what each ring bearing answers, the finishes by their features."""
    graph, nodes = given.graph, model.scale.nodes
    range_rank, colour_rank, extra = model.ranks
    beyond, known = given.range_m > model.scale.max_range_m, given.finish >= 0
    both = np.concatenate([model.expected, model.range_bias[:, None]], axis=1)
    lower, upper = hats(given.range_m, model.scale)
    table = _between(both[:nodes], lower, upper)
    table = beyond.spread(2).where(both[nodes], table)
    table = given.unsure.spread(2).where(both[nodes + 1], table)
    colour = palette.gather(given.finish)
    features = [_channels(table, 0, range_rank), _channels(colour, 0, colour_rank)]
    biases = [_channels(table, range_rank, 1), _channels(colour, colour_rank, 1)]
    blank = graph.filled(0.0, F32, given.range_m.size(0), given.layout.bearings, extra)
    psi = graph.joined([*features, blank, *biases], 2)
    if not model.ring_layers:
        return psi
    scale_place = (lower.cast(F64) + upper.cast(F64)) / float(nodes)
    context = [scale_place, beyond, given.unsure, known]
    hidden = graph.joined([*features, *(value.cast(F32).spread(2) for value in context)], 2).moved(0, 2, 1)
    for layer in model.ring_layers:
        hidden = _layer(hidden, layer)
    by_range, by_colour = (~given.unsure).cast(F32).spread(2), known.cast(F32).spread(2)
    speaks = [0] * range_rank + [1] * colour_rank + [0] * (extra + 1) + [1]
    return psi + hidden.moved(0, 2, 1) * graph.joined([by_range, by_colour], 2).gather(speaks, axis=2)


def _palette_features(palette: Value, model: RobotMatcher) -> Value:
    """[f + 1 k + 1] kernel features and -log Z of each finish; zero in the last row, 'unknown'."""
    features = _colour_features((palette + model.dark).log(), model)
    tilt = (features * model.weight) @ np.ascontiguousarray(model.background.T)
    peak = tilt.max(1, keep=True)
    log_mean = ((tilt - peak).exp().mean(1, keep=True)).log() + peak
    return palette.graph.joined([features, 0.0 - log_mean], 1).padded((0, 0), (1, 0), F32(0))


# ---- the strip's side ------------------------------------------------------------------------------


def _phi(given: Inputs, model: RobotMatcher) -> Value:
    """[w channels] what the strip asks of each ring bearing it looks at."""
    graph, present = given.graph, given.present.cast(F32).spread(1)
    range_rank, colour_rank, extra_rank = model.ranks
    came_back = ~given.depth_m.is_nan() & given.present
    lower, upper = hats(given.depth_m, model.scale)
    table = _between(model.measured, lower, upper)
    table = came_back.spread(1).where(table, model.measured[-1]) * present
    coloured, log_rgb, mean = given.log_colour(float(model.dark))
    seen, level = coloured.cast(F32).spread(1), mean - model.level
    colour = _colour_features(log_rgb - level * model.power, model) * seen
    range_gate, colour_gate = graph.constant(model.range_gate), graph.constant(model.colour_gate)
    extra = []
    if model.strip_layers:
        back = came_back.cast(F32).spread(1)
        scale_place = ((lower.cast(F32) + upper) / float(model.scale.nodes)).spread(1) * back
        hidden = graph.joined([table, colour, scale_place, back, seen, seen * level], 1)
        out = _strip_residual(hidden, model) * present
        range_gate = range_gate + _soft_limit(_channels(out, 0, 1), model)
        colour_gate = colour_gate + _soft_limit(_channels(out, 1, 1), model)
        table = table + _channels(out, 2, range_rank)
        colour = colour + _channels(out, 2 + range_rank, colour_rank) * seen
        extra = [_channels(out, 2 + range_rank + colour_rank, extra_rank)]
    range_share, colour_share = range_gate.exp() * present, colour_gate.exp() * seen
    weighted = colour * (colour_share * model.weight)
    return graph.joined([table * range_share, weighted, *extra, range_share, colour_share], 1)


def _strip_residual(hidden: Value, model: RobotMatcher) -> Value:
    """[w 2 + range + colour + extra] of the strip's network: two looks around, then all pooled."""
    first, second, last = model.strip_layers
    hidden = _layer(_layer(hidden.moved(1, 0).spread(0), first), second)
    pooled = hidden.mean(2, keep=True).op("Expand", hidden.op("Shape", dtype=I64))
    return _layer(hidden.graph.joined([hidden, pooled], 1), last).shaped(last.shape.outputs, -1).moved(1, 0)


def _soft_limit(gate: Value, model: RobotMatcher) -> Value:
    return (gate / model.gate_limit).op("Tanh") * model.gate_limit


# ---- shared by both sides --------------------------------------------------------------------------


def _layer(x: Value, layer: Layer) -> Value:
    """[n outputs l] from [n inputs l]."""
    margin = layer.shape.kernel // 2
    if layer.shape.edges == "circular":
        x = x.op("Pad", np.array([0, 0, margin, 0, 0, margin]), mode="wrap")
        margin = 0
    out = x.op("Conv", layer.weight, layer.bias, pads=[margin, margin])
    return out.op("Relu") if layer.shape.then == "relu" else out


def _channels(values: Value, first: int, count: int) -> Value:
    """So many of the last axis, from `first` on."""
    return values.gather(np.arange(first, first + count), axis=-1)


def _between(table: np.ndarray, lower: Value, upper: Value) -> Value:
    """Rows of `table` interpolated between a node and the one above it: [... k]."""
    rows, share = lower.graph.constant(table), upper.spread(-1)
    return rows.gather(lower) * (1.0 - share) + rows.gather(lower + 1) * share


def _colour_features(log_rgb: Value, model: RobotMatcher) -> Value:
    """[a k] factored kernel features of log colours [a 3]."""
    apart = log_rgb.spread(1) - model.landmarks
    square = (apart * apart).sum(2)
    return (square * F32(-0.5) / model.spread**2).exp() @ model.root

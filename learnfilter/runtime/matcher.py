"""The factored matcher as the robot runs it.

`observe/matcher.py` explains it, and a change there must come here; a test holds both together.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.layers import Floats, Layer, LayerShape
from learnfilter.runtime.site import RobotSite
from learnfilter.runtime.table import Cells, RingTable


class RobotMatcher(RobotModel):
    """log-lik(heading h, cell) = sum over columns w of phi[w] . psi[h K + first + w].

    Args:
        layout: how strips lie on rings.
        facts: see `manifest.schema.json`, model.matcher.
        arrays: weights.
    """

    def __init__(self, layout: RingLayout, facts: Mapping[str, Any], arrays: Arrays):
        self.layout, self.scale = layout, RangeScale(**facts["scale"])
        self.dark, self.gate_limit = np.float32(facts["dark"]), np.float32(facts["gate_limit"])
        range_rank, colour_rank, _ = self.ranks = tuple(facts["ranks"])
        nodes = self.scale.nodes
        self.measured = arrays.take("measured", nodes + 1, range_rank)
        self.expected = arrays.take("expected", nodes + 2, range_rank)
        self.range_bias = arrays.take("range_bias", nodes + 2)
        self.landmarks = arrays.take("landmarks", None, 3)
        self.root = arrays.take("root", len(self.landmarks), colour_rank)
        self.background = arrays.take("background", None, colour_rank)
        self.weight, self.spread, self.power, self.level = arrays.take("colour_fit", 4)
        self.range_gate = arrays.take("log_range_exponent")
        self.colour_gate = arrays.take("log_colour_exponent")
        layers = [Layer(shape, arrays) for shape in matcher_layers(facts)]
        self.strip_layers, self.ring_layers = layers[:3], layers[3:]

    # ---- the plan's side ---------------------------------------------------------------------------

    def read(self, site: RobotSite, small: bool = False) -> RingTable:
        """What each ring bearing answers; computed for a cell when it is first needed."""
        palette = self._palette_features(site.palette)
        return RingTable(
            lambda part: self._psi(site, palette[site.finish[part]], part),
            len(site.cells),
            self.layout.bearings,
            sum(self.ranks) + 2,
            self.layout.finer().bearings // self.layout.finer().bearings_per_heading,
            small,
        )

    def _psi(self, site: RobotSite, colour: Floats, part: slice) -> Floats:
        """[n p channels] analytic features plus the learned residual, for some cells."""
        range_rank, colour_rank, extra = self.ranks
        range_m, unsure, nodes = site.range_m[part], site.unsure[part], self.scale.nodes
        beyond = range_m > self.scale.max_range_m
        both = np.concatenate([self.expected, self.range_bias[:, None]], axis=1)
        lower, upper = self._hats(range_m)
        table = _between(both[:nodes], lower, upper)
        table[beyond], table[unsure] = both[nodes], both[nodes + 1]
        blank = np.zeros((*range_m.shape, extra), np.float32)
        psi = np.concatenate(
            [table[..., :-1], colour[..., :-1], blank, table[..., -1:], colour[..., -1:]], axis=-1
        )
        if not self.ring_layers:
            return psi
        known = site.finish[part] >= 0
        context = np.stack([(lower + upper) / nodes, beyond, unsure, known], axis=-1).astype(np.float32)
        hidden = np.concatenate([psi[..., : range_rank + colour_rank], context], axis=-1)
        for layer in self.ring_layers:
            hidden = layer(hidden)
        spoken = [~unsure] * range_rank + [known] * colour_rank + [~unsure] * (extra + 1) + [known]
        return psi + hidden * np.stack(spoken, axis=-1)

    def _palette_features(self, palette: Floats) -> Floats:
        """[f + 1 k + 1] kernel features and -log Z of each finish; zero in the last row, 'unknown'."""
        features = self._colour_features(np.log(palette + self.dark))
        tilt = self.weight * features @ self.background.T
        bias = np.float32(np.log(len(self.background))) - np.logaddexp.reduce(tilt, axis=1)
        return np.pad(np.concatenate([features, bias[:, None]], axis=1), ((0, 1), (0, 0)))

    # ---- the strip's side --------------------------------------------------------------------------

    def scores(self, depth_m: Floats, rgb: Floats, features: RingTable, cells: Cells) -> Floats:
        """[looks*h k]; the strip is turned, not the rings."""
        asked = np.zeros((self.layout.bearings, sum(self.ranks) + 2), np.float32)
        asked[(self.layout.finer().first + np.arange(self.layout.columns)) % self.layout.bearings] = (
            self._phi(depth_m, rgb)
        )
        return features.scores(asked, cells)

    def _phi(self, depth_m: Floats, rgb: Floats) -> Floats:
        """[w channels] what the strip asks of each ring bearing it looks at."""
        range_rank, colour_rank, _ = self.ranks
        present = self.layout.present()
        table, colour, seen, context = self._strip_features(depth_m, rgb, present)
        range_gate, colour_gate = self.range_gate, self.colour_gate
        extra = np.zeros((len(table), 0), np.float32)
        if self.strip_layers:
            out = self._strip_residual(np.concatenate([table, colour, context], axis=1))
            out = out * present[:, None]
            range_gate = range_gate + self._soft_limit(out[:, 0])
            colour_gate = colour_gate + self._soft_limit(out[:, 1])
            table_add, colour_add, extra = np.split(
                out[:, 2:], [range_rank, range_rank + colour_rank], axis=1
            )
            table, colour = table + table_add, colour + colour_add * seen[:, None]
        range_share, colour_share = np.exp(range_gate) * present, np.exp(colour_gate) * seen
        weighted = colour * (self.weight * colour_share)[:, None]
        biases = np.stack([range_share, colour_share], axis=1)
        return np.concatenate([table * range_share[:, None], weighted, extra, biases], axis=1)

    def _strip_features(
        self, depth_m: Floats, rgb: Floats, present: NDArray[np.bool_]
    ) -> tuple[Floats, Floats, NDArray[np.bool_], Floats]:
        """Range [w k], colour [w k], seen [w] and context [w 4]."""
        came_back = np.isfinite(depth_m) & present
        lower, upper = self._hats(depth_m)
        table = _between(self.measured, lower, upper)
        table = np.where(came_back[:, None], table, self.measured[-1]) * present[:, None]
        seen = np.isfinite(rgb).all(axis=1) & present
        log_rgb = np.log(np.maximum(np.nan_to_num(rgb), 0) + self.dark)
        level = (log_rgb.mean(axis=1) * seen).sum() / np.float32(max(int(seen.sum()), 1)) - self.level
        colour = self._colour_features(log_rgb - self.power * level) * seen[:, None]
        place_on_scale = (lower + upper) / np.float32(self.scale.nodes) * came_back
        context = np.stack([place_on_scale, came_back, seen, level * seen], axis=1)
        return table, colour, seen, context.astype(np.float32)

    def _strip_residual(self, hidden: Floats) -> Floats:
        """[w 2 + range + colour + extra] of the strip's network: two looks around, then all pooled."""
        first, second, last = self.strip_layers
        hidden = second(first(hidden[None]))
        pooled = np.broadcast_to(hidden.mean(axis=1, keepdims=True), hidden.shape)
        return last(np.concatenate([hidden, pooled], axis=-1))[0]

    def _soft_limit(self, gate: Floats) -> Floats:
        return self.gate_limit * np.tanh(gate / self.gate_limit)

    # ---- shared by both sides ----------------------------------------------------------------------

    def _hats(self, range_m: Floats) -> tuple[NDArray[np.int64], Floats]:
        lower, upper = self.scale.hats(range_m)
        return lower, upper.astype(np.float32)

    def _colour_features(self, log_rgb: Floats) -> Floats:
        """[... k] factored kernel features of log colours [... 3]."""
        square = ((log_rgb[..., None, :] - self.landmarks) ** 2).sum(axis=-1)
        return np.exp(-0.5 * square / self.spread**2) @ self.root


def matcher_layers(facts: Mapping[str, Any]) -> list[LayerShape]:
    """The layers in the order they run: three on the strip, three on the ring; none without residual."""
    if not facts["residual"]:
        return []
    range_rank, colour_rank, extra = facts["ranks"]
    known = range_rank + colour_rank
    strip, ring, kernel = facts["strip_hidden"], facts["ring_hidden"], facts["kernel"]
    return [
        LayerShape("strip_in", known + 4, strip, kernel, "zero", "relu"),
        LayerShape("strip_mid", strip, strip, kernel, "zero", "relu"),
        LayerShape("strip_out", 2 * strip, 2 + known + extra, 1, "zero", "none"),
        LayerShape("ring_in", known + 4, ring, kernel, "circular", "relu"),
        LayerShape("ring_mid", ring, ring, kernel, "circular", "relu"),
        LayerShape("ring_out", ring, known + extra + 2, 1, "circular", "none"),
    ]


def _between(table: Floats, lower: NDArray[np.int64], upper: Floats) -> Floats:
    """Rows of `table` interpolated between a node and the one above it: [... k]."""
    return table[lower] * (1 - upper[..., None]) + table[lower + 1] * upper[..., None]

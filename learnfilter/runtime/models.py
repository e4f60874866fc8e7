"""Observation models as the robot runs them.

Each mirrors a model of `observe/`, which explains it, without torch; a test holds both together.
Facts come from the manifest, arrays from the weights; nothing is a constant of this code.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout, end_offsets
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.layers import Floats, place
from learnfilter.runtime.matcher import RobotMatcher
from learnfilter.runtime.site import RobotSite
from learnfilter.runtime.table import Cells

Facts = Mapping[str, Any]


class RobotBeam(RobotModel):
    """A table of evidence, measured bin against expected node, summed over columns."""

    def __init__(self, layout: RingLayout, facts: Facts, arrays: Arrays):
        self.layout, self.scale = layout, RangeScale(**facts["scale"])
        self.table = arrays.take("table", self.scale.nodes + 1, self.scale.nodes + 2)

    def read(self, site: RobotSite, small: bool = False) -> NDArray[np.int64]:
        """[p n] expected node; `nodes` beyond reach, `nodes + 1` where unsure."""
        beyond = site.range_m > self.scale.max_range_m
        node = np.where(beyond, self.scale.nodes, self._node(np.where(beyond, 0.0, site.range_m)))
        return np.ascontiguousarray(np.where(site.unsure, self.scale.nodes + 1, node).T)

    def scores(self, depth_m: Floats, rgb: Floats, features: NDArray[np.int64], cells: Cells) -> Floats:
        measured = np.where(np.isnan(depth_m), self.scale.nodes, self._node(np.nan_to_num(depth_m)))
        rows = self.table[measured] * self.layout.present()[:, None]
        return sum_along_rings(rows, features[:, cells], self.layout)

    def _node(self, range_m: NDArray[np.floating]) -> NDArray[np.int64]:
        clipped = np.clip(range_m, 0.0, self.scale.max_range_m)
        return np.minimum(np.rint(self.scale.position(clipped)).astype(np.int64), self.scale.nodes - 1)


class RobotColour(RobotModel):
    """A Gaussian kernel between a column's log colour and the finish's, less its normaliser."""

    def __init__(self, layout: RingLayout, facts: Facts, arrays: Arrays):
        self.layout, self.facts = layout, facts
        self.background = arrays.take("background", None, 3, dtype=np.float64)

    def read(
        self, site: RobotSite, small: bool = False
    ) -> tuple[NDArray[np.int64], Floats, NDArray[np.float64]]:
        """Finish [p n] (unknown: f), log colours [f 3] and log normalisers [f]."""
        colours = np.log(site.palette + self.facts["dark"])
        kernel = self._kernel(self.background, colours)
        normaliser = np.log(np.exp(self.facts["weight"] * kernel).mean(axis=0))
        finish = np.where(site.finish < 0, len(colours), site.finish).T
        return np.ascontiguousarray(finish, np.int64), colours, normaliser

    def scores(self, depth_m: Floats, rgb: Floats, features: Any, cells: Cells) -> Floats:
        finish, colours, normaliser = features
        seen = np.isfinite(rgb).all(axis=1) & self.layout.present()
        x = np.log(np.maximum(np.nan_to_num(rgb), 0.0) + self.facts["dark"])
        own = (x.mean(axis=1) * seen).sum() / max(int(seen.sum()), 1)
        x = x - self.facts["level_power"] * (own - self.facts["level"])
        evidence = (self.facts["weight"] * self._kernel(x, colours) - normaliser) * seen[:, None]
        table = np.pad(evidence, ((0, 0), (0, 1)))  # an unknown finish: no evidence
        return sum_along_rings(table.astype(np.float32), finish[:, cells], self.layout)

    def _kernel(self, x: NDArray[np.floating], y: NDArray[np.floating]) -> NDArray[np.floating]:
        square = ((x[:, None] - y) ** 2).sum(axis=-1)
        return np.exp(-0.5 * square / self.facts["spread"] ** 2)


class RobotEndpoint(RobotModel):
    """A table of evidence over the distance from a column's end to the nearest surface."""

    def __init__(self, layout: RingLayout, facts: Facts, arrays: Arrays):
        self.layout, self.step_m, self.max_range_m = layout, facts["step_m"], facts["max_range_m"]
        self.table = arrays.take("table", None)

    def read(self, site: RobotSite, small: bool = False) -> Any:
        """Classes of distance on a field widened by the sensor's reach, and where each cell lies in it."""
        farthest = len(self.table) - 1
        classes = np.minimum(np.rint(site.field_m / self.step_m), farthest).astype(np.int64)
        margin = int(np.ceil(self.max_range_m * site.field_scale / site.grid.cell_m)) + site.field_scale
        field = np.pad(classes, margin, constant_values=farthest)
        corners = site.cells * site.field_scale + margin
        angles = self.layout.look_angles()
        return field, np.ravel_multi_index(corners.T, field.shape), angles, site.grid.cell_m, site.field_scale

    def scores(self, depth_m: Floats, rgb: Floats, features: Any, cells: Cells) -> Floats:
        field, corners, angles, cell_m, scale = features
        corner = corners[cells]
        evidence = self.table[field].ravel()
        used = np.isfinite(depth_m) & self.layout.present()
        reach_m = np.minimum(depth_m[used], self.max_range_m)
        rows, columns = end_offsets(reach_m, angles[:, used], cell_m, scale)
        offsets = rows * field.shape[1] + columns
        out = np.zeros((len(offsets), len(corner)), np.float32)
        for heading, ends in zip(out, offsets, strict=True):
            for end in ends:
                heading += evidence[corner + end]
        return out


class RobotBlend(RobotModel):
    """Sum over parts of exponent x log-likelihood."""

    def __init__(self, layout: RingLayout, facts: Facts, arrays: Arrays):
        self.layout = layout
        self.parts = {
            name: (np.float32(part["exponent"]), build_model(layout, part["model"], arrays.under(name)))
            for name, part in facts["parts"].items()
        }

    def read(self, site: RobotSite, small: bool = False) -> dict[str, Any]:
        """Features of every part."""
        return {name: model.read(site, small) for name, (_, model) in self.parts.items()}

    def scores(self, depth_m: Floats, rgb: Floats, features: dict[str, Any], cells: Cells) -> Floats:
        return sum(
            (exponent * model.scores(depth_m, rgb, features[name], cells))
            for name, (exponent, model) in self.parts.items()
        )  # type: ignore[return-value]  # the schema asks for at least one part


KINDS: Mapping[str, Callable[[RingLayout, Facts, Arrays], RobotModel]] = {
    "beam": RobotBeam,
    "colour": RobotColour,
    "endpoint": RobotEndpoint,
    "blend": RobotBlend,
    "matcher": RobotMatcher,
}


def build_model(layout: RingLayout, model: Facts, arrays: Arrays) -> RobotModel:
    """The model that a manifest's member `model` describes: one kind with its facts."""
    ((kind, facts),) = model.items()
    return KINDS[kind](layout, facts, arrays)


def sum_along_rings(rows: Floats, ring: NDArray[np.int64], layout: RingLayout) -> Floats:
    """[looks*h n] sum over columns of `rows` [w e] at the class [p n] of the bearing each looks at."""
    placed = place(rows, layout.finer())
    out = np.zeros((ring.shape[1], placed.shape[2]), np.float32)
    for table, classes in zip(placed, ring, strict=True):
        out += table[classes]
    return out.T

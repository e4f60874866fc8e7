"""What the graphs are handed, and what every model makes of it first.

Mirrors `runtime/localizer.py` (how a strip is laid), `core/colour.py` and `core/scale.py`; a change there
must come here, and a test holds them together.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.export.onnx_graph import BOOL, F32, F64, I64, Graph, Value
from learnfilter.runtime.bundle import Bundle


@dataclass(frozen=True, eq=False)
class Inputs:
    """One strip and one site as values of a graph.

    Attributes:
        graph: theirs.
        bundle: what does not change from strip to strip.
        depth_m: [w] on the strip's ring bearings, NaN where nothing came back.
        rgb: [w 3] linear, NaN where there is none.
        range_m, unsure, finish, palette: see `runtime.site.RobotSite`.
        cells: [n 2], or None where the graph has no use for them.
        field_m: [rows*s columns*s], or None likewise.
    """

    graph: Graph
    bundle: Bundle
    depth_m: Value
    rgb: Value
    range_m: Value
    unsure: Value
    finish: Value
    palette: Value
    cells: Value | None
    field_m: Value | None

    @property
    def layout(self) -> RingLayout:
        return self.bundle.site.layout

    @property
    def looks(self) -> int:
        """At how many headings a strip is scored."""
        fine = self.layout.finer()
        return fine.bearings // fine.bearings_per_heading

    @cached_property
    def present(self) -> Value:
        """[w] whether any raw column serves the position."""
        return self.graph.constant(self.layout.present())

    @cached_property
    def position_at(self) -> Value:
        """[p looks*h] the strip position that looks along a bearing at each look; w where none does."""
        fine, graph = self.layout.finer(), self.graph
        looks = graph.counted(self.looks) * fine.bearings_per_heading
        bearings = graph.counted(fine.bearings).spread(1)
        return ((bearings - fine.first - looks) % fine.bearings).at_most(fine.columns)

    def placed(self, rows: Value) -> Value:
        """[p looks*h e]: rows [w e] of a strip at the bearings it looks at, zero elsewhere."""
        return rows.padded((0, 0), (1, 0), F32(0)).gather(self.position_at)

    def log_colour(self, dark: float) -> tuple[Value, Value, Value]:
        """Columns that have a colour [w], log colours [w 3], and their mean over columns and channels."""
        seen = ~self.rgb.sum(1).is_nan() & self.present
        log_rgb = (self.rgb.is_nan().where(0.0, self.rgb) + dark).log()
        count = seen.cast(F32).sum().at_least(1.0)
        return seen, log_rgb, (log_rgb.mean(1) * seen.cast(F32)).sum() / count


def declare(graph: Graph, bundle: Bundle, cells: bool, field: bool) -> Inputs:
    """Declare the inputs of a graph and lay the strip on the ring.

    Args:
        graph: without nodes yet.
        bundle: what is fixed.
        cells, field: whether `cells` and `field_m` are handed in too.
    """
    site, strip = bundle.site, bundle.strip
    raw = graph.input("depth_m", F32, strip.columns)
    colour = graph.input("rgb", F32, strip.columns, 3) if strip.has_colour else None
    rings, grid, scale = ("n", site.layout.bearings), site.grid, site.field_scale
    return Inputs(
        graph,
        bundle,
        _depth(raw, bundle),
        _linear(colour, bundle) if colour else graph.filled(np.nan, F32, site.layout.columns, 3),
        graph.input("range_m", F32, *rings),
        graph.input("unsure", BOOL, *rings),
        graph.input("finish", I64, *rings),
        graph.input("palette", F32, "f", 3),
        graph.input("cells", I64, "n", 2) if cells else None,
        graph.input("field_m", F32, grid.rows * scale, grid.columns * scale) if field else None,
    )


def position(range_m: Value, scale: RangeScale) -> Value:
    """Fractional node number of ranges, in double precision like `RangeScale.position`."""
    return (range_m.cast(F64) * scale.growth / scale.first_m + 1.0).log() / scale.growth


def hats(range_m: Value, scale: RangeScale) -> tuple[Value, Value]:
    """Lower node and the weight of the node above it, see `RangeScale.hats`."""
    known = range_m.is_nan().where(0.0, range_m).cast(F64)
    on_scale = position(known.at_least(0.0).at_most(scale.max_range_m), scale)
    lower = on_scale.op("Floor").at_most(scale.nodes - 2.0)
    return lower.cast(I64), (on_scale - lower).at_most(1.0).cast(F32)


def _depth(raw: Value, bundle: Bundle) -> Value:
    """[w] raw depths within the sensor's ranges, on ring bearings."""
    measured = (raw >= bundle.strip.min_range_m) & (raw <= bundle.strip.max_range_m)
    laid, present = _laid(measured.where(raw, np.nan), bundle.site.layout)
    return present.where(laid, np.nan)


def _linear(raw: Value, bundle: Bundle) -> Value:
    """[w 3] linear light of raw sRGB, on ring bearings (IEC 61966-2-1)."""
    srgb = raw.cast(F64)
    curve = ((srgb.at_least(0.04045) + 0.055) / 1.055).op("Pow", 2.4)
    light = (srgb > 0.04045).where(curve, srgb / 12.92).cast(F32)  # NaN is not above: it stays
    laid, present = _laid(light, bundle.site.layout)
    return present.spread(1).where(laid, np.nan)


def _laid(raw: Value, layout: RingLayout) -> tuple[Value, Value]:
    """The raw column that serves each position [w ...], and whether any does [w]."""
    return raw.gather(np.maximum(layout.source, 0)), raw.graph.constant(layout.present())

"""Line charts and forest plots as SVG: sizes in the chart's own units, colours from the style sheet."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from learnfilter.report.markup import Markup, tag
from learnfilter.report.model import Chart, Curve, Forest, Interval
from learnfilter.report.palette import LINE_STYLES

WIDTH, HEIGHT = 440, 280
LEFT, RIGHT, TOP, BOTTOM = 52, 418, 10, 236
# Points of a curve that carry a marker: more would hide the line.
MAX_MARKERS = 12
ROW = 66  # height of a row of a forest plot
# Attributes of a legend's little drawing.
SAMPLE: dict[str, str | int] = {"viewBox": "0 0 36 14", "width": 36, "height": 14, "aria_hidden": "true"}

Styles = Mapping[str, int]


def styles_of(names: Sequence[str]) -> dict[str, int]:
    """A line style for each distinct name, in order of appearance."""
    return {name: i % len(LINE_STYLES) for i, name in enumerate(dict.fromkeys(names))}


def ticks(low: float, high: float, about: int = 5) -> NDArray[np.float64]:
    """Round numbers (1, 2 or 5 times a power of ten) inside [low, high], roughly `about` of them."""
    raw = (high - low) / about
    power = 10.0 ** np.floor(np.log10(raw))
    step = power * next(k for k in (1, 2, 5, 10) if k * power >= raw * 0.999)
    first, last = np.ceil(low / step - 1e-9), np.floor(high / step + 1e-9)
    return np.arange(first, last + 1) * step + 0.0  # no negative zero


def round_length(limit: float) -> float:
    """The largest of 1, 2 or 5 times a power of ten that does not exceed `limit`, for scale bars."""
    power = 10.0 ** np.floor(np.log10(limit))
    return max(k for k in (1, 2, 5) if k == 1 or k * power <= limit) * float(power)


def marker(shape: str, x: float, y: float, size: float = 4.0) -> Markup:
    """A marker of the named shape about (x, y), filled by its class."""
    paths = {
        "square": "M-1 -1H1V1H-1Z",
        "triangle": "M0 -1.2L1.1 .9H-1.1Z",
        "diamond": "M0 -1.4L1.4 0L0 1.4L-1.4 0Z",
        "cross": "M-1.3 -.4H-.4V-1.3H.4V-.4H1.3V.4H.4V1.3H-.4V.4H-1.3Z",
        "bar": "M-.45 -1.4H.45V1.4H-.45Z",
    }
    if shape == "circle":
        return tag("circle", class_="mark", cx=float(x), cy=float(y), r=size)
    return tag("path", class_="mark", d=paths[shape], transform=f"translate({x:.2f} {y:.2f}) scale({size})")


def sample(style: int) -> Markup:
    """A short piece of a line with its marker, for legends and headings."""
    look = LINE_STYLES[style]
    line = tag("path", class_="line", d="M1 7H35", stroke_dasharray=look.dash)
    return tag("svg", line, marker(look.marker, 18, 7), class_=f"sample s{style}", **SAMPLE)


def legend(names: Sequence[str], styles: Styles) -> Markup:
    """Samples with names."""
    return tag("ul", *(tag("li", sample(styles[n]), " ", n) for n in names), class_="legend")


def line_chart(chart: Chart, styles: Styles, *, cursor: bool = False) -> Markup:
    """A figure: the chart, its legend and note.

    Args:
        chart: what to draw.
        styles: line style of each curve's label.
        cursor: draw an upright line that the page's script moves along x.
    """
    x_range, y_range = _extent([c.x for c in chart.curves]), chart.y_range or _y_extent(chart.curves)
    across, up = _scale(x_range, LEFT, RIGHT), _scale(y_range, BOTTOM, TOP)
    parts = [_axes(chart, x_range, y_range)]
    parts += [_curve(curve, styles[curve.label], across, up) for curve in chart.curves]
    if cursor:
        low, high = x_range
        line = tag("line", class_="cursor", x1=RIGHT, x2=RIGHT, y1=TOP, y2=BOTTOM)
        parts.append(tag("g", line, data_low=low, data_high=high, data_left=LEFT, data_right=RIGHT))
    view = f"0 0 {WIDTH} {HEIGHT}"
    picture = tag("svg", *parts, viewBox=view, role="img", aria_label=_chart_words(chart), class_="chart")
    return tag(
        "figure",
        tag("figcaption", tag("h4", chart.title)),
        picture,
        legend([c.label for c in chart.curves], styles),
        tag("p", chart.note, class_="note") if chart.note else "",
    )


def _chart_words(chart: Chart) -> str:
    ends = []
    for curve in chart.curves:
        seen = np.flatnonzero(np.isfinite(curve.y))
        if seen.size:
            first, last = seen[0], seen[-1]
            ends.append(
                f"{curve.label} goes from {format(float(curve.y[first]), '.3g')} at {curve.x[first]:g} "
                f"to {format(float(curve.y[last]), '.3g')} at {curve.x[last]:g}"
            )
    return f"{chart.title}. {chart.y_label} against {chart.x_label}. " + "; ".join(ends)


def _extent(arrays: Sequence[NDArray]) -> tuple[float, float]:
    values = np.concatenate([np.ravel(np.asarray(a, dtype=float)) for a in arrays] or [np.zeros(1)])
    values = values[np.isfinite(values)]
    if not values.size:
        return 0.0, 1.0
    low, high = float(values.min()), float(values.max())
    return (low, high) if high > low else (low - 0.5, high + 0.5)


def _y_extent(curves: Sequence[Curve]) -> tuple[float, float]:
    low, high = _extent([a for c in curves for a in (c.y, c.low, c.high) if a is not None])
    air = 0.06 * (high - low)
    return (0.0 if 0 <= low < 0.4 * high else low - air), high + air


def _scale(extent: tuple[float, float], start: float, end: float):
    low, high = extent
    return lambda value: start + (np.asarray(value, dtype=float) - low) / (high - low) * (end - start)


def _axes(chart: Chart, x_range: tuple[float, float], y_range: tuple[float, float]) -> Markup:
    across, up = _scale(x_range, LEFT, RIGHT), _scale(y_range, BOTTOM, TOP)
    parts = []
    for value in ticks(*y_range):
        y = float(up(value))
        parts.append(tag("path", class_="grid", d=f"M{LEFT} {y:.1f}H{RIGHT}"))
        parts.append(tag("text", format(float(value), chart.form), x=LEFT - 7, y=y + 4, text_anchor="end"))
    for value in ticks(*x_range, about=6):
        x = float(across(value))
        parts.append(tag("path", class_="tick", d=f"M{x:.1f} {BOTTOM}v5"))
        parts.append(tag("text", f"{value:g}", x=x, y=BOTTOM + 19, text_anchor="middle"))
    parts.append(tag("path", class_="axis", d=f"M{LEFT} {BOTTOM}H{RIGHT}"))
    middle = (TOP + BOTTOM) / 2
    parts.append(tag("text", chart.x_label, class_="label", x=RIGHT, y=BOTTOM + 38, text_anchor="end"))
    turned = f"translate(13 {middle}) rotate(-90)"
    parts.append(tag("text", chart.y_label, class_="label", transform=turned, text_anchor="middle"))
    return tag("g", *parts, class_="axes")


def _curve(curve: Curve, style: int, across, up) -> Markup:
    x, y = across(curve.x), up(curve.y)
    look = LINE_STYLES[style]
    parts = []
    if curve.low is not None and curve.high is not None:
        outline = _pieces(np.r_[x, x[::-1]], np.r_[up(curve.low), up(curve.high)[::-1]])
        parts.append(tag("path", class_="band", d=outline + "Z"))
    parts.append(tag("path", class_="line", d=_pieces(x, y), stroke_dasharray=look.dash))
    seen = np.flatnonzero(np.isfinite(y))
    marked = seen[np.unique(np.linspace(0, len(seen) - 1, min(len(seen), MAX_MARKERS)).astype(int))]
    parts += [marker(look.marker, x[i], y[i], 3.4) for i in marked]
    return tag("g", *parts, class_=f"s{style}")


def _pieces(x: NDArray, y: NDArray) -> str:
    """Path through the finite points, broken where one is missing."""
    text, down = [], False
    for a, b in zip(x, y, strict=True):
        if np.isfinite(a) and np.isfinite(b):
            text.append(f"{'L' if down else 'M'}{a:.1f} {b:.1f}")
        down = bool(np.isfinite(a) and np.isfinite(b))
    return "".join(text)


def forest_plot(forest: Forest) -> Markup:
    """A figure with one row a difference: label, number, whom it favours, bar about zero."""
    ends = [np.array([i.value, i.low, i.high]) for _, i in forest.rows]
    low, high = _extent([*ends, np.zeros(1)])
    air = 0.05 * (high - low)
    extent = (low - air, high + air)
    across = _scale(extent, 12, RIGHT)
    bottom = ROW * len(forest.rows) + 8
    parts = [_forest_row(ROW * k, name, i, forest, across) for k, (name, i) in enumerate(forest.rows)]
    parts.append(tag("path", class_="axis", d=f"M12 {bottom}H{RIGHT}"))
    for value in ticks(*extent):
        x = float(across(value))
        parts.append(tag("path", class_="tick", d=f"M{x:.1f} {bottom}v5"))
        parts.append(tag("text", format(float(value), forest.form), x=x, y=bottom + 19, text_anchor="middle"))
    parts.append(tag("text", f"\u2190 favours {forest.below}", x=12, y=bottom + 40, class_="label"))
    right = f"favours {forest.above} \u2192"
    parts.append(tag("text", right, x=RIGHT, y=bottom + 40, text_anchor="end", class_="label"))
    words = "; ".join(f"{n}: {interval_text(i, forest.form)}, {_favours(i, forest)}" for n, i in forest.rows)
    picture = tag(
        "svg",
        *parts,
        viewBox=f"0 0 {WIDTH} {bottom + 50}",
        role="img",
        aria_label=f"{forest.title}. {forest.x_label}. {words}",
        class_="chart forest",
    )
    caption = tag("figcaption", tag("h4", forest.title), tag("p", forest.x_label, class_="note"))
    return tag("figure", caption, picture, tag("p", forest.note, class_="note") if forest.note else "")


def _forest_row(top: float, name: str, interval: Interval, forest: Forest, across) -> Markup:
    y = top + 52
    words = f"{interval_text(interval, forest.form)}: {_favours(interval, forest)}"
    parts = [
        tag("text", name, x=12, y=top + 18, class_="strong"),
        tag("text", words, x=12, y=top + 35),
        tag("path", class_="zero", d=f"M{float(across(0)):.1f} {y - 10}v20"),
    ]
    if np.isfinite([interval.low, interval.high]).all():
        a, b = float(across(interval.low)), float(across(interval.high))
        path = f"M{a:.1f} {y - 4}v8M{a:.1f} {y}H{b:.1f}M{b:.1f} {y - 4}v8"
        parts.append(tag("path", class_="whisker", d=path))
    if np.isfinite(interval.value):
        parts.append(marker("diamond", float(across(interval.value)), y, 4.4))
    return tag("g", *parts, class_=f"s{_leaning(interval)}")


def _leaning(interval: Interval) -> int:
    """Line style of a difference: one for each side, a third when undecided; words say the same beside it."""
    return 2 if interval.low > 0 else 1 if interval.high < 0 else 0


def _favours(interval: Interval, forest: Forest) -> str:
    if interval.low > 0:
        return f"favours {forest.above}"
    return f"favours {forest.below}" if interval.high < 0 else "undecided"


def interval_text(value: Interval, form: str) -> str:
    """A number and its interval, or the number alone; a dash for NaN."""
    if not np.isfinite(value.value):
        return "\u2013"
    text = format(value.value, form)
    if np.isfinite([value.low, value.high]).all():
        text += f" [{format(value.low, form)}, {format(value.high, form)}]"
    return text

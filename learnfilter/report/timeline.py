"""States along a drive as SVG: one line a filter, told apart by height and dash as well as colour."""

from __future__ import annotations

from collections.abc import Sequence

from learnfilter.report.drive_model import Timeline
from learnfilter.report.markup import Markup, tag
from learnfilter.report.svg import SAMPLE, ticks

STATES = ("searching", "locked", "locked wrongly", "lost")
WIDTH, LEFT, RIGHT = 900, 12, 888
LINE = 48  # height of a line with its label
Stretch = tuple[int, int, str]


def timeline(drawn: Timeline) -> Markup:
    """A figure: lines over rows, alarms as marks on top of them, the legend of what occurs."""
    length = max(end for _, stretches, _ in drawn.lines for _, end, _ in stretches)
    parts = [_line(n, *line, length) for n, line in enumerate(drawn.lines)]
    bottom = LINE * len(drawn.lines) + 6
    parts.append(tag("path", class_="axis", d=f"M{LEFT} {bottom}H{RIGHT}"))
    for row in ticks(0, length, about=8):
        x = _across(float(row), length)
        parts.append(tag("path", class_="tick", d=f"M{x:.1f} {bottom}v5"))
        parts.append(tag("text", f"{row:g}", x=x, y=bottom + 19, text_anchor="middle"))
    parts.append(tag("text", "row", class_="label", x=RIGHT, y=bottom + 36, text_anchor="end"))
    words = "; ".join(f"{label}: {_words(stretches, alarms)}" for label, stretches, alarms in drawn.lines)
    picture = tag(
        "svg", *parts, viewBox=f"0 0 {WIDTH} {bottom + 42}", role="img", aria_label=f"{drawn.title}. {words}",
        class_="chart states",
    )  # fmt: skip
    note = tag("p", drawn.note, class_="note") if drawn.note else ""
    return tag(
        "figure", tag("figcaption", tag("h3", drawn.title)), picture, _legend(drawn), note, class_="map"
    )


def _across(row: float, length: int) -> float:
    return LEFT + row / length * (RIGHT - LEFT)


def _line(
    number: int, label: str, stretches: Sequence[Stretch], alarms: Sequence[int], length: int
) -> Markup:
    top = LINE * number
    middle = top + 34
    parts = [tag("text", label, x=LEFT, y=top + 18, class_="strong")]
    for start, end, state in stretches:
        path = f"M{_across(start, length):.1f} {middle}H{_across(end, length):.1f}"
        parts.append(tag("path", class_=_class(state), d=path))
    parts += [_alarm(_across(row, length), middle - 9) for row in alarms]
    return tag("g", *parts)


def _alarm(x: float, y: float) -> Markup:
    return tag("path", class_="alarm", d=f"M{x:.1f} {y + 6:.1f}l-5 -9h10Z")


def _class(state: str) -> str:
    return "is-" + state.replace(" ", "-")


def _words(stretches: Sequence[Stretch], alarms: Sequence[int]) -> str:
    told = ", ".join(f"{state} from row {start}" for start, _, state in stretches)
    return told + (f", alarms at rows {', '.join(map(str, alarms))}" if alarms else "")


def _legend(drawn: Timeline) -> Markup:
    occurring = {state for _, stretches, _ in drawn.lines for _, _, state in stretches}
    items = [
        tag("li", _sample(tag("path", class_=_class(state), d="M1 7H35")), " ", state)
        for state in STATES
        if state in occurring
    ]
    if any(alarms for *_, alarms in drawn.lines):
        items.append(tag("li", _sample(_alarm(18, 7)), " alarm: surprises have added up"))
    return tag("ul", *items, class_="legend")


def _sample(part: Markup) -> Markup:
    return tag("svg", part, class_="sample states", **SAMPLE)

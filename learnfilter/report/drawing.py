"""A floor plan as SVG: drawn once a page as a symbol in metres (y up), used wherever it is shown."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, SOLID, WALL, WINDOW, FloorPlan
from learnfilter.report.markup import Markup, join, tag
from learnfilter.report.model import Placement, SiteMap
from learnfilter.report.palette import LOOKS, png_uri, value_levels
from learnfilter.report.svg import SAMPLE, round_length, ticks

AREA_WORDS = {"solid": " solid thing", "unmapped": " unmapped"}
DOOR_WORDS = {OPEN: "open door", SHUT: "shut door"}


class Frame:
    """The window a plan is seen through, in metres with y up, and a unit to size marks by."""

    def __init__(self, plan: FloorPlan, *, axes: bool = False):
        left, bottom, right, top = plan.bounds
        self.unit = max(right - left, top - bottom, 1e-3) / 100
        air, foot = 3 * self.unit, 9 * self.unit
        self.left = left - (2.5 * air if axes else air)
        self.bottom, self.right, self.top = bottom - foot, right + air, top + air

    @property
    def view_box(self) -> str:
        width, height = self.right - self.left, self.top - self.bottom
        return f"{self.left:.3f} {-self.top:.3f} {width:.3f} {height:.3f}"


def plan_id(plan: FloorPlan) -> str:
    """Name of the plan's symbol on the page."""
    return "plan-" + plan.content_hash()[:12]


def plan_symbol(plan: FloorPlan) -> Markup:
    """The plan's lines and areas, to be used by id."""
    solid = (plan.kind == WALL) | (plan.kind == SOLID)
    areas = {"unmapped": plan.unmapped, "solid": plan.solids}
    parts = [tag("path", class_=name, d=_outlines(some)) for name, some in areas.items() if some]
    parts.append(tag("path", class_="casing", d=_segments(plan.segments[solid])))
    for finish in np.unique(plan.finish[solid]):
        chosen = solid & (plan.finish == finish)
        colour = f"stroke:{hex_colour(plan.finishes[finish].srgb)}" if finish >= 0 else None
        parts.append(tag("path", class_="wall", style=colour, d=_segments(plan.segments[chosen])))
    windows = plan.segments[plan.kind == WINDOW]
    if len(windows):
        parts += [tag("path", class_=c, d=_segments(windows)) for c in ("window", "pane")]
    for state in np.unique(plan.state[plan.kind == DOOR]):
        chosen = (plan.kind == DOOR) & (plan.state == state)
        name = DOOR_WORDS.get(int(state), "unknown door")
        parts.append(tag("path", class_=name.replace(" ", "-"), d=_segments(plan.segments[chosen])))
    return tag("g", *parts, id=plan_id(plan), class_="plan")


def hex_colour(srgb: tuple[float, float, float]) -> str:
    """sRGB in [0, 1] as #rrggbb."""
    return "#" + "".join(f"{int(np.clip(np.rint(255 * part), 0, 255)):02x}" for part in srgb)


def _segments(segments: NDArray) -> str:
    return "".join(f"M{x0:.2f} {y0:.2f}L{x1:.2f} {y1:.2f}" for x0, y0, x1, y1 in segments)


def _outlines(outlines: tuple[NDArray, ...]) -> str:
    return "".join("M" + "L".join(f"{x:.2f} {y:.2f}" for x, y in outline) + "Z" for outline in outlines)


def plan_picture(plan: FloorPlan, *layers: Markup, alt: str, axes: bool = False) -> Markup:
    """The plan with layers on top, both in metres with y up."""
    frame = Frame(plan, axes=axes)
    up = tag("g", tag("use", href=f"#{plan_id(plan)}"), *layers, transform="scale(1 -1)")
    margin = [_axes(frame, plan)] if axes else [scale_bar(frame)]
    return tag("svg", up, *margin, viewBox=frame.view_box, role="img", aria_label=alt, class_="plan")


def scale_bar(frame: Frame) -> Markup:
    """A round length at the foot of the frame."""
    length = round_length(25 * frame.unit)
    x, y = frame.left + 3 * frame.unit, -frame.bottom - 3.2 * frame.unit
    bar = tag("path", class_="bar", d=f"M{x:.3f} {y:.3f}h{length:.3f}")
    after = {"x": x + length + 1.5 * frame.unit, "y": y + 1.3 * frame.unit, "font_size": 4 * frame.unit}
    label = tag("text", f"{length:g} m", **after)
    return tag("g", bar, label, class_="scale")


def _axes(frame: Frame, plan: FloorPlan) -> Markup:
    left, bottom, right, top = plan.bounds
    size = 2.4 * frame.unit
    parts = []
    for x in ticks(left, right):
        y = -bottom + 2.5 * frame.unit
        parts.append(tag("path", class_="tick", d=f"M{x:.3f} {y:.3f}v{frame.unit:.3f}"))
        parts.append(
            tag("text", f"{x:g} m", x=float(x), y=y + 3.6 * frame.unit, font_size=size, text_anchor="middle")
        )
    for y in ticks(bottom, top)[1:]:
        x = left - 1.7 * frame.unit  # right of its label, where it is no minus sign
        parts.append(tag("path", class_="tick", d=f"M{x:.3f} {-y:.3f}h{frame.unit:.3f}"))
        before = {"x": float(x) - 0.4 * frame.unit, "y": float(-y) + 0.8 * frame.unit}
        parts.append(tag("text", f"{y:g}", **before, font_size=size, text_anchor="end"))
    return tag("g", *parts, class_="scale")


def cells_image(levels: NDArray[np.uint8], placement: Placement) -> Markup:
    """A picture of [r c] levels laid on its cells (row 0 at the smallest y)."""
    top = placement.bottom_m + len(levels) * placement.cell_m
    both = images(levels[::-1], placement.cell_m, x=placement.left_m, y=-top)
    return tag("g", *both, transform="scale(1 -1)")


def images(levels: NDArray[np.uint8], cell: float, **place: float) -> list[Markup]:
    """The picture of [r c] levels (first row on top) twice: for light paper and for dark."""
    rows, columns = levels.shape
    size = {"width": columns * cell, "height": rows * cell, "preserveAspectRatio": "none"}
    return [
        tag("image", href=png_uri(levels, look), class_=f"belief {look}", **size, **place) for look in LOOKS
    ]


def plan_legend(plan: FloorPlan) -> Markup:
    """What the strokes mean, for those that occur."""
    solid = (plan.kind == WALL) | (plan.kind == SOLID)
    used = [plan.finishes[f] for f in np.unique(plan.finish[solid]) if f >= 0]
    items = [tag("li", _swatch("wall", hex_colour(f.srgb)), f" finish: {f.name}") for f in used]
    rows = [("wall", "wall, finish unknown")] if (plan.finish[solid] < 0).any() else []
    if (plan.kind == WINDOW).any():
        rows.append(("window", "window"))
    for state in np.unique(plan.state[plan.kind == DOOR]):
        name = DOOR_WORDS.get(int(state), "unknown door")
        rows.append((name.replace(" ", "-"), name if state in DOOR_WORDS else "door, state unknown"))
    items += [tag("li", _swatch(kind), " ", words) for kind, words in rows]
    for name, some in (("solid", plan.solids), ("unmapped", plan.unmapped)):
        if some:
            box = tag("path", class_=name, d="M1 1H35V13H1Z")
            items.append(tag("li", _sample(box), AREA_WORDS[name]))
    return tag("ul", *items, class_="legend")


def _swatch(kind: str, colour: str | None = None) -> Markup:
    casing = tag("path", class_="casing", d="M2 7H34") if kind == "wall" else ""
    pane = tag("path", class_="pane", d="M2 7H34") if kind == "window" else ""
    line = tag("path", class_=kind, d="M2 7H34", style=colour and f"stroke:{colour}")
    return _sample(casing, line, pane)


def _sample(*parts: Markup | str) -> Markup:
    return tag("svg", *parts, class_="sample plan", **SAMPLE)


def site_map(site_map: SiteMap) -> Markup:
    """A figure: plan, values, numbered notes and the list of what they say."""
    layers, key = [], Markup("")
    if site_map.values is not None and site_map.placement is not None:
        levels, low, high = value_levels(np.asarray(site_map.values, dtype=float))
        layers.append(cells_image(levels, site_map.placement))
        key = scale_key(site_map.value_label, f"{low:.3g}", f"{high:.3g}")
    unit = Frame(site_map.plan).unit
    places = [(k, n.severity, n.where) for k, n in enumerate(site_map.notes, 1) if n.where is not None]
    layers += [numbered_mark(*place, unit) for place in places]
    alt = f"{site_map.title}: plan {site_map.plan.name} with {len(places)} numbered places"
    items = [
        tag("li", tag("strong", n.severity), ": ", n.message, _advice(n.advice), class_=f"is-{n.severity}")
        for n in site_map.notes
    ]
    return tag(
        "figure",
        tag("figcaption", tag("h3", site_map.title)),
        plan_picture(site_map.plan, *layers, alt=alt, axes=True),
        key,
        plan_legend(site_map.plan),
        tag("ol", *items, class_="findings") if items else "",
        tag("p", site_map.note, class_="note") if site_map.note else "",
        class_="map",
    )


def _advice(advice: str) -> Markup:
    return join([" ", tag("span", advice, class_="advice")]) if advice else Markup("")


def numbered_mark(number: int, severity: str, where: tuple[float, float], unit: float) -> Markup:
    """A number on a shape: a diamond for an error, a disc for anything else."""
    x, y = where
    size = 1.9 * unit
    shape = (
        tag("path", d=f"M0 {-1.35 * size:.3f}L{1.35 * size:.3f} 0L0 {1.35 * size:.3f}L{-1.35 * size:.3f} 0Z")
        if severity == "error"
        else tag("circle", r=size)
    )
    label = tag("text", number, y=0.75 * unit, font_size=2.2 * unit, text_anchor="middle")
    upright = f"translate({x:.3f} {y:.3f}) scale(1 -1)"
    return tag("g", shape, label, class_=f"place is-{severity}", transform=upright)


def scale_key(label: str, low: str, high: str) -> Markup:
    """The colour scale of cells with its two ends written out."""
    ramp = tag("span", class_="ramp", aria_hidden="true")
    words = tag("span", label, class_="note")
    return tag("p", tag("span", low), ramp, tag("span", high), " ", words, class_="key")

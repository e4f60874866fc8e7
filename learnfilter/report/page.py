"""Put a run's page together: one HTML file that asks nothing of any other."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

from learnfilter.core.files import whole_file
from learnfilter.report.drawing import plan_symbol, site_map
from learnfilter.report.markup import Markup, join, tag
from learnfilter.report.model import RunPage
from learnfilter.report.palette import LOOKS, scale_colours
from learnfilter.report.player import player
from learnfilter.report.sections import cautions, headline, provenance, section, story, table
from learnfilter.report.svg import forest_plot, line_chart, styles_of
from learnfilter.report.timeline import timeline
from learnfilter.report.trails import trail_map

# The browser itself refuses whatever is not inside the file.
POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'unsafe-inline'"


def write_page(page: RunPage, path: str | Path) -> None:
    """Write the page whole or not at all (UTF-8)."""
    text = render_page(page)
    with whole_file(path) as beside:
        beside.write_text(text, encoding="utf-8")


def render_page(page: RunPage) -> str:
    """The page as HTML."""
    models = [track.model for episode in page.episodes for track in episode.tracks]
    trails = [trail.label for drawn in page.trail_maps for trail in drawn.trails]
    styles = styles_of(models + trails + [curve.label for chart in page.charts for curve in chart.curves])
    players = [player(episode, n, styles) for n, episode in enumerate(page.episodes, 1)]
    parts = {
        "belief": section("belief", "Watch the belief", _chooser(page), *players),
        "trail": section("trail", "Where the robot was", *(trail_map(m, styles) for m in page.trail_maps)),
        "happened": section(
            "happened", "What happened", *map(timeline, page.timelines), *map(story, page.stories)
        ),
        "site": section("site", "The site", *(site_map(m) for m in page.maps)),
        "comparison": section(
            "comparison",
            "Comparison",
            *(table(t) for t in page.tables),
            _grid([forest_plot(f) for f in page.forests]),
        ),
        "curves": section("curves", "Curves", _grid([line_chart(c, styles) for c in page.charts])),
        "sizes": section("sizes", "Sizes and timings", *(table(t) for t in page.facts)),
        "cautions": section("cautions", "Cautions", cautions(page.cautions)),
        "provenance": section("provenance", "Where this came from", provenance(page)),
    }
    links = [tag("a", name.capitalize(), href=f"#{name}") for name, part in parts.items() if part]
    contents = tag("nav", *links, aria_label="On this page")
    body = tag(
        "body",
        _symbols(page),
        headline(page),
        contents,
        tag("main", *parts.values()),
        tag("script", Markup(_asset("page.js"))),
    )
    return "<!DOCTYPE html>\n" + tag("html", _head(page), body, lang="en") + "\n"


def _asset(name: str) -> str:
    return (files("learnfilter.report") / "assets" / name).read_text(encoding="utf-8")


def _head(page: RunPage) -> Markup:
    return tag(
        "head",
        tag("meta", charset="utf-8"),
        tag("meta", http_equiv="Content-Security-Policy", content=POLICY),
        tag("meta", name="viewport", content="width=device-width, initial-scale=1"),
        tag("meta", name="color-scheme", content="light dark"),
        tag("title", f"{page.title} \u2013 learnfilter {page.verb}"),
        tag("style", Markup(_asset("page.css") + "".join(map(_ramp, LOOKS)))),
    )


def _ramp(look: str) -> str:
    """The style sheet's name for the colours of cells: their scale as a gradient."""
    stops = ",".join("rgb({} {} {}/{:.2f})".format(*c[:3], c[3] / 255) for c in scale_colours(look)[::7])
    return f":root{{--ramp-{look}:linear-gradient(to right,{stops})}}\n"


def _symbols(page: RunPage) -> Markup:
    """Every plan of the page, drawn once, and the hatching of unmapped area."""
    plans = {
        p.content_hash(): p
        for p in (
            *(e.plan for e in page.episodes),
            *(m.plan for m in page.trail_maps),
            *(m.plan for m in page.maps),
        )
    }
    hatch = tag(
        "pattern",
        tag("path", d="M0 .5H.5"),
        id="hatch",
        width=0.5,
        height=0.5,
        patternUnits="userSpaceOnUse",
        patternTransform="rotate(45)",
    )
    drawings = tag("defs", hatch, *map(plan_symbol, plans.values()))
    return tag("svg", drawings, width=0, height=0, class_="symbols")


def _chooser(page: RunPage) -> Markup:
    if not page.episodes:
        return Markup("")
    hint = tag(
        "p",
        "Drag the slider, press Play, or use the arrow keys. The address of the page keeps the step.",
        class_="note",
    )
    options = [tag("option", f"{n}. {e.name}", value=n) for n, e in enumerate(page.episodes, 1)]
    choose = tag("label", "Drive ", tag("select", *options, id="drive"), class_="choose")
    script = tag("noscript", tag("p", "Without JavaScript only the last strip of each drive is shown."))
    return join([hint, choose if len(options) > 1 else "", script])


def _grid(figures: list[Markup]) -> Markup:
    return tag("div", *figures, class_="charts") if figures else Markup("")

"""The belief of one or several models on one drive, to be stepped through."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.poses import wrap
from learnfilter.report.drawing import Frame, images, plan_id, plan_legend, scale_bar, scale_key
from learnfilter.report.markup import Markup, data_script, join, numbers, tag
from learnfilter.report.model import Chart, Curve, Episode, Track
from learnfilter.report.palette import MASS_FLOOR, downsample, mass_levels
from learnfilter.report.svg import SAMPLE, Styles, line_chart, sample

# More frames than this make the page heavy; longer drives show evenly chosen strips.
MAX_FRAMES = 120
# More rays than this are a smear at the size of a panel.
MAX_RAYS = 90


def player(episode: Episode, number: int, styles: Styles) -> Markup:
    """One drive: controls, a panel a model, curves over strips with a cursor, and the data of it all."""
    shown = np.unique(np.linspace(0, episode.steps - 1, min(episode.steps, MAX_FRAMES)).round().astype(int))
    name = f"drive-{number}"
    return tag(
        "article",
        tag("h3", episode.name),
        tag("p", f"Site {episode.plan.name}, {episode.steps} weighed strips.", class_="note"),
        _controls(episode, shown, name),
        tag("div", *(_panel(episode, track, shown, styles) for track in episode.tracks), class_="panels"),
        _keys(episode),
        tag("div", *_charts(episode, styles), class_="charts"),
        data_script(_data(episode, shown), "drive"),
        class_="player",
        id=name,
    )


def _controls(episode: Episode, shown: NDArray, name: str) -> Markup:
    last = len(shown)
    slider = tag("input", type="range", id=f"{name}-step", min=1, max=last, step=1, value=last, class_="step")
    choices = [("estimate", "from each estimate"), ("none", "hidden")]
    if episode.reference is not None:
        choices.insert(0, ("reference", "from the reference"))
    options = [tag("option", words, value=value) for value, words in choices]
    return tag(
        "div",
        tag("button", "Play", type="button", class_="play"),
        tag("label", "Strip", for_=f"{name}-step"),
        slider,
        tag("output", f"strip {episode.steps} of {episode.steps}", for_=f"{name}-step", class_="where"),
        tag("label", "Rays ", tag("select", *options, class_="rays")),
        class_="controls",
    )


def _panel(episode: Episode, track: Track, shown: NDArray, styles: Styles) -> Markup:
    frame = Frame(episode.plan)
    layers = [
        _frames(episode, track, shown),
        tag("path", class_="ray"),
        tag("path", class_="hit"),
        tag("use", href=f"#{plan_id(episode.plan)}"),
        tag("path", class_="trail reference-trail"),
        tag("path", class_="trail estimate-trail"),
        _robot("reference", frame.unit),
        _robot("estimate", frame.unit),
    ]
    alt = f"Belief of {track.model} on {episode.plan.name} after the last strip"
    picture = tag(
        "svg",
        tag("g", *layers, transform="scale(1 -1)"),
        scale_bar(frame),
        viewBox=frame.view_box,
        role="img",
        aria_label=alt,
        class_="plan",
    )
    name, badge = tag("strong", track.model), tag("span", class_="badge")
    caption = tag("figcaption", sample(styles[track.model]), " ", name, badge)
    return tag("figure", caption, picture, tag("p", class_="readout"), class_="panel", data_model=track.model)


def _frames(episode: Episode, track: Track, shown: NDArray) -> Markup:
    """All frames of a track side by side in one picture; a nested window shows one of them."""
    mass, block = downsample(track.mass[shown])
    steps, rows, columns = mass.shape
    across = int(np.ceil(np.sqrt(steps * rows / columns)))
    down = -(-steps // across)
    sheet = np.zeros((down * across, rows, columns), np.uint8)
    sheet[:steps] = mass_levels(mass)[:, ::-1]
    sheet = sheet.reshape(down, across, rows, columns).swapaxes(1, 2).reshape(down * rows, across * columns)
    place, cell = episode.placement, episode.placement.cell_m * block
    last = steps - 1
    window = tag(
        "svg",
        *images(sheet, 1.0),
        x=place.left_m,
        y=-(place.bottom_m + rows * cell),
        width=columns * cell,
        height=rows * cell,
        viewBox=f"{last % across * columns} {last // across * rows} {columns} {rows}",
        preserveAspectRatio="none",
        class_="frames",
        data_across=across,
        data_columns=columns,
        data_rows=rows,
    )
    return tag("g", window, transform="scale(1 -1)")


def _robot(kind: str, unit: float) -> Markup:
    """A ring with a pointer for the reference, an arrow head for an estimate; the script places them."""
    shape = (
        tag("path", d="M2 0A2 2 0 1 0 -2 0A2 2 0 1 0 2 0H4.2")
        if kind == "reference"
        else tag("path", d="M3 0L-2 1.9L-1 0L-2 -1.9Z")
    )
    return tag("g", tag("g", shape, transform=f"scale({unit:.4f})"), class_=f"robot {kind}", hidden=True)


def _keys(episode: Episode) -> Markup:
    items = [("estimate", "M30 7L12 1L17 7L12 13Z", "estimate")]
    if episode.reference is not None:
        items.append(("reference", "M14 7a5 5 0 1 0 10 0a5 5 0 1 0 -10 0M24 7h9", "reference pose"))
    marks = [
        tag(
            "li",
            tag("svg", tag("path", d=d, class_=f"robot {kind}"), class_="sample", **SAMPLE),
            " ",
            words,
        )
        for kind, d, words in items
    ]
    _, block = downsample(episode.tracks[0].mass[:1])
    cell = episode.placement.cell_m * block
    scale = scale_key(f"of the belief in one {cell:.2g} m cell, log scale", f"{MASS_FLOOR:.3%}", "100%")
    return join([scale, tag("ul", *marks, class_="legend"), plan_legend(episode.plan)])


def _charts(episode: Episode, styles: Styles) -> list[Markup]:
    strips = np.arange(1, episode.steps + 1)
    entropy = tuple(Curve(t.model, strips, t.entropy_nats) for t in episode.tracks)
    charts = [Chart("How undecided the filter is", "strip", "entropy, nats", entropy)]
    referred = [(t.model, t.near_reference) for t in episode.tracks if t.near_reference is not None]
    near = tuple(Curve(model, strips, share) for model, share in referred)
    if near:
        charts.append(Chart("Mass near the reference pose", "strip", "share", near, (0.0, 1.0), ".0%"))
    return [line_chart(chart, styles, cursor=True) for chart in charts]


def _data(episode: Episode, shown: NDArray) -> dict:
    thin = slice(None, None, -(-len(episode.bearings_rad) // MAX_RAYS))
    reference = None if episode.reference is None else np.asarray(episode.reference)[shown]
    return {
        "strips": [int(k) + 1 for k in shown],
        "of": episode.steps,
        "mount": numbers(episode.mount, 4),
        "bearings": numbers(np.asarray(episode.bearings_rad)[thin], 4),
        "depth": numbers(np.asarray(episode.depth_m)[shown][:, thin], 2),
        "reference": None if reference is None else numbers(reference),
        "tracks": [_track_data(track, shown, reference) for track in episode.tracks],
    }


def _track_data(track: Track, shown: NDArray, reference: NDArray | None) -> dict:
    estimate = np.asarray(track.estimate)[shown]
    entropy = numbers(np.asarray(track.entropy_nats)[shown])
    data = {"model": track.model, "estimate": numbers(estimate), "entropy": entropy}
    if track.near_reference is not None:
        data["near"] = numbers(np.asarray(track.near_reference)[shown])
    if track.locked is not None:
        data["locked"] = [bool(b) for b in np.asarray(track.locked)[shown]]
    if reference is not None:
        away = estimate - reference
        data["error_m"] = numbers(np.hypot(away[:, 0], away[:, 1]))
        data["error_deg"] = numbers(np.degrees(np.abs(wrap(away[:, 2]))), 1)
    return data

"""Plans and drives as PNG files, for terminals without a browser and for other people's documents."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PathCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from matplotlib.path import Path as Outline
from matplotlib.transforms import ScaledTranslation
from numpy.typing import NDArray

from learnfilter.core.files import whole_file
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, SOLID, UNKNOWN, WALL, WINDOW, FloorPlan
from learnfilter.report.drawing import hex_colour
from learnfilter.report.drive_model import PlacePatch, Trail, TrailMap
from learnfilter.report.model import PlaceNote
from learnfilter.report.palette import LINE_STYLES, PATCH_LOOKS
from learnfilter.report.svg import round_length

CASING, PLAIN_WALL, SOLID_FILL, WINDOW_BLUE = "#333a45", "#9aa1ab", "#d3cfc4", "#2f8fc4"
UNMAPPED = {"facecolor": "none", "edgecolor": "#b9b4a6", "hatch": "////", "lw": 0.5}
DOOR_STROKES = {  # label, colour, dash, width: told apart without colour
    OPEN: ("open door", "#00805c", (0, (0.4, 2.2)), 2.2),
    SHUT: ("shut door", "#7a4a1d", "solid", 3.6),
    UNKNOWN: ("door, state unknown", "#b4568f", (0, (3.2, 1.8)), 2.4),
}
NOTE_MARKS = {"error": ("D", "#d1335b"), "warning": ("o", "#c65300"), "note": ("o", "#0072b2")}
# A longer list does not fit beside the plan; what is left out is counted at its end.
MAX_LISTED = 18


def draw_plan(
    plan: FloorPlan,
    path_png: str | Path,
    *,
    findings: Sequence[PlaceNote] = (),
    trail: NDArray | None = None,
    title: str | None = None,
) -> None:
    """Draw a plan as a filter will see it.

    Args:
        plan: to draw, walls in their finish.
        path_png: file to write, whole or not at all.
        findings: numbered on the plan where they have a place, and listed beside it.
        trail: [t 2] or [t 3] x_m, y_m (heading_rad), NaN where unknown.
        title: instead of the plan's name.
    """
    figure, axes = _sheet(plan, title or plan.name)
    handles = _draw_walls(axes, plan)
    if trail is not None:
        handles += axes.plot(trail[:, 0], trail[:, 1], color="#d1335b", lw=1.5, zorder=5, label="trail")
    for number, finding in enumerate(findings, 1):
        if finding.where is not None:
            _numbered(axes, number, finding.severity, finding.where)
    if findings:
        _list_beside(axes, findings)
    _finish(figure, axes, handles, path_png)


def draw_replay(drawn: TrailMap, path_png: str | Path) -> None:
    """Draw what one or several filters made of a drive.

    Args:
        drawn: a single trail is coloured by its entropy, several have a line style each.
        path_png: file to write, whole or not at all.
    """
    figure, axes = _sheet(drawn.plan, drawn.title)
    handles = _draw_walls(axes, drawn.plan) + _draw_patches(axes, drawn.patches)
    if drawn.reference is not None:
        x, y = drawn.reference[:, 0], drawn.reference[:, 1]
        handles += axes.plot(x, y, color="black", lw=1.1, ls=":", zorder=5, label="reference pose")
    if len(drawn.trails) == 1:
        x, y, _ = drawn.trails[0].pose.T
        axes.plot(x, y, color="#888888", lw=0.7, zorder=5)
        dots = axes.scatter(x, y, c=drawn.trails[0].entropy_nats, cmap="viridis_r", s=22, zorder=6)
        figure.colorbar(dots, ax=axes, label="entropy of the belief, nats", shrink=0.6, pad=0.02)
    else:
        handles += [_styled(axes, trail, n % len(LINE_STYLES)) for n, trail in enumerate(drawn.trails)]
    lost = np.concatenate([trail.pose[np.asarray(trail.lost, bool)] for trail in drawn.trails])
    if len(lost):
        look = {"marker": "x", "s": 46, "color": "#c65300", "zorder": 7, "label": "estimate while lost"}
        handles.append(axes.scatter(lost[:, 0], lost[:, 1], **look))
    locks = np.concatenate([trail.locks for trail in drawn.trails])
    if len(locks):
        look = {"marker": "*", "ms": 17, "mfc": "white", "mec": "black", "ls": "none", "zorder": 8}
        handles += axes.plot(locks[:, 0], locks[:, 1], **look, label="locked here")
    _finish(figure, axes, handles, path_png)


def _styled(axes: Axes, trail: Trail, style: int) -> Line2D:
    look = LINE_STYLES[style]
    dash = "solid" if look.dash == "none" else (0, tuple(float(length) / 2 for length in look.dash.split()))
    x, y, _ = trail.pose.T
    (line,) = axes.plot(x, y, color=look.colour, ls=dash, lw=1.8, zorder=6, label=_plain(trail.label))
    return line


def _draw_patches(axes: Axes, patches: Sequence[PlacePatch]) -> list[Patch]:
    """Draw squares that disagree; return what the legend needs."""
    handles = []
    for kind, look in PATCH_LOOKS.items():
        own = [patch for patch in patches if patch.kind == kind]
        face = {"facecolor": look.colour if look.filled else "none", "alpha": 0.6 if look.filled else 1.0}
        style = {**face, "edgecolor": look.colour, "lw": 1.6, "ls": "solid" if look.filled else "dashed"}
        for patch in own:
            corner = (patch.x_m - patch.side_m / 2, patch.y_m - patch.side_m / 2)
            axes.add_patch(Rectangle(corner, patch.side_m, patch.side_m, **style, zorder=4))
        if own:
            handles.append(Patch(label=look.words, **style))
    return handles


def _sheet(plan: FloorPlan, title: str) -> tuple[Figure, Axes]:
    left, bottom, right, top = plan.bounds
    width, height = max(right - left, 0.1), max(top - bottom, 0.1)
    figure = Figure(figsize=(10, float(np.clip(10 * height / width, 3, 14))), dpi=120, facecolor="white")
    axes = figure.add_axes((0, 0, 1, 1))
    air = 0.04 * max(width, height)
    axes.set(xlim=(left - air, right + air), ylim=(bottom - 2.2 * air, top + air))
    axes.set_aspect("equal")
    axes.set(xlabel="x, metres", ylabel="y, metres")
    axes.set_title(_plain(title), loc="left", fontweight="bold")
    axes.spines[["top", "right"]].set_visible(False)
    return figure, axes


def _plain(text: str) -> str:
    """Keep a dollar sign in a name from starting a formula."""
    return text.replace("$", r"\$")


def _lines(axes: Axes, segments: NDArray, **look) -> None:
    axes.add_collection(LineCollection(segments.reshape(-1, 2, 2), **look))


def _areas(axes: Axes, outlines: Sequence[NDArray], **look) -> None:
    if outlines:
        whole = Outline.make_compound_path(*(Outline(np.vstack([o, o[:1]]), closed=True) for o in outlines))
        axes.add_collection(PathCollection([whole], **look))


def _draw_walls(axes: Axes, plan: FloorPlan) -> list:
    """Draw everything of the plan; return what the legend needs."""
    _areas(axes, plan.unmapped, **UNMAPPED, zorder=1)
    _areas(axes, plan.solids, facecolor=SOLID_FILL, edgecolor="none", zorder=1)
    solid = (plan.kind == WALL) | (plan.kind == SOLID)
    colours = [hex_colour(plan.finishes[f].srgb) if f >= 0 else PLAIN_WALL for f in plan.finish[solid]]
    _lines(axes, plan.segments[solid], colors=CASING, lw=3.6, capstyle="round", zorder=2)
    _lines(axes, plan.segments[solid], colors=colours or PLAIN_WALL, lw=2.0, capstyle="round", zorder=3)
    used = [plan.finishes[f] for f in np.unique(plan.finish[solid]) if f >= 0]
    handles = [
        Line2D([], [], color=hex_colour(f.srgb), lw=5, label=f"finish: {_plain(f.name)}") for f in used
    ]
    if (plan.finish[solid] < 0).any():
        handles.append(Line2D([], [], color=PLAIN_WALL, lw=4, label="wall, finish unknown"))
    windows = plan.segments[plan.kind == WINDOW]
    if len(windows):
        _lines(axes, windows, colors=WINDOW_BLUE, lw=4.4, capstyle="butt", zorder=3)
        _lines(axes, windows, colors="white", lw=1.8, capstyle="butt", zorder=3)
        handles.append(Line2D([], [], color=WINDOW_BLUE, lw=4, label="window"))
    for state, (label, colour, dash, width) in DOOR_STROKES.items():
        chosen = (plan.kind == DOOR) & (plan.state == state)
        if chosen.any():
            _lines(axes, plan.segments[chosen], colors=colour, ls=dash, lw=width, zorder=4)
            handles.append(Line2D([], [], color=colour, ls=dash, lw=width, label=label))
    if plan.solids:
        handles.append(Patch(facecolor=SOLID_FILL, label="solid thing"))
    if plan.unmapped:
        handles.append(Patch(label="unmapped", **UNMAPPED))
    _scale_bar(axes)
    return handles


def _scale_bar(axes: Axes) -> None:
    left, right = axes.get_xlim()
    bottom, top = axes.get_ylim()
    length = round_length((right - left) / 4)
    x, y = left + 0.04 * (right - left), bottom + 0.025 * (top - bottom)
    axes.plot([x, x + length], [y, y], color="black", lw=3, solid_capstyle="butt")
    axes.annotate(f"{length:g} m", (x + length, y), xytext=(5, 0), textcoords="offset points", va="center")


def _numbered(axes: Axes, number: int, severity: str, where: tuple[float, float]) -> None:
    shape, colour = NOTE_MARKS.get(severity, NOTE_MARKS["note"])
    x, y = where
    axes.plot([x], [y], marker=shape, ms=14, mfc=colour, mec="white", mew=1.2, ls="none", zorder=9)
    look = {"color": "white", "ha": "center", "va": "center", "fontsize": 7.5, "fontweight": "bold"}
    axes.annotate(str(number), (x, y), zorder=10, **look)


def _list_beside(axes: Axes, findings: Sequence[PlaceNote]) -> None:
    lines = [f"{n}. {f.severity}: {f.message}" for n, f in enumerate(findings[:MAX_LISTED], 1)]
    if len(findings) > MAX_LISTED:
        lines.append(f"and {len(findings) - MAX_LISTED} more")
    text = "\n".join(textwrap.fill(line, 46, subsequent_indent="    ") for line in lines)
    axes.text(1.02, 1, _plain(text), va="top", fontsize=9, transform=axes.transAxes, linespacing=1.35)


def _finish(figure: Figure, axes: Axes, handles: list, path_png: str | Path) -> None:
    under_label = ScaledTranslation(0, -0.55, figure.dpi_scale_trans)  # inches
    look = {"loc": "upper left", "ncols": 4, "frameon": False, "fontsize": 9}
    axes.legend(handles=handles, bbox_to_anchor=(0, 0), bbox_transform=axes.transAxes + under_label, **look)
    with whole_file(path_png) as beside:
        figure.savefig(beside, format="png", bbox_inches="tight", pad_inches=0.2, metadata={"Software": None})

"""One drive on its plan, as one or several filters understood it, as SVG."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from learnfilter.report.drawing import Frame, plan_legend, plan_picture
from learnfilter.report.drive_model import PlacePatch, Trail, TrailMap
from learnfilter.report.markup import Markup, join, tag
from learnfilter.report.palette import LINE_STYLES, PATCH_LOOKS
from learnfilter.report.svg import SAMPLE, Styles, sample

STAR = "M0 -1.3L.31 -.42L1.24 -.4L.5 .16L.76 1.05L0 .52L-.76 1.05L-.5 .16L-1.24 -.4L-.31 -.42Z"
CROSS = "M-1 -1L1 1M-1 1L1 -1"


def trail_map(drawn: TrailMap, styles: Styles) -> Markup:
    """A figure: plan, patches that disagree, reference, a trail a filter, and what each mark means."""
    unit = Frame(drawn.plan).unit
    layers = [patch_square(patch) for patch in drawn.patches]
    if drawn.reference is not None:
        layers.append(tag("path", class_="trail reference-trail", d=_path(drawn.reference)))
    layers += [_trail(trail, styles[trail.label], unit) for trail in drawn.trails]
    names = ", ".join(trail.label for trail in drawn.trails)
    alt = f"{drawn.title}: trails of {names} on {drawn.plan.name}, {len(drawn.patches)} patches that disagree"
    return tag(
        "figure",
        tag("figcaption", tag("h3", drawn.title)),
        plan_picture(drawn.plan, *layers, alt=alt, axes=True),
        _legend(drawn, styles),
        plan_legend(drawn.plan),
        tag("p", drawn.note, class_="note") if drawn.note else "",
        class_="map",
    )


def patch_square(patch: PlacePatch) -> Markup:
    """A square of the plan in the look of its kind."""
    half = patch.side_m / 2
    corner = f"M{patch.x_m - half:.2f} {patch.y_m - half:.2f}"
    return tag(
        "path",
        class_=f"patch-{patch.kind}",
        d=f"{corner}h{patch.side_m:.2f}v{patch.side_m:.2f}h-{patch.side_m:.2f}Z",
    )


def _trail(trail: Trail, style: int, unit: float) -> Markup:
    line = tag("path", class_="line", d=_path(trail.pose), stroke_dasharray=LINE_STYLES[style].dash)
    crosses = [
        _mark("lost-mark", CROSS, pose, 0.7 * unit) for pose in trail.pose[np.asarray(trail.lost, bool)]
    ]
    stars = [_mark("lock-mark", STAR, pose, 1.8 * unit) for pose in trail.locks]
    return tag("g", line, *crosses, *stars, class_=f"s{style}")


def _mark(name: str, path: str, pose: NDArray, size: float) -> Markup:
    upright = f"translate({pose[0]:.3f} {pose[1]:.3f}) scale({size:.3f} {-size:.3f})"
    return tag("path", class_=name, d=path, transform=upright)


def _path(poses: NDArray) -> str:
    """Line through the poses that are known, broken where one is not."""
    text, down = [], False
    for x, y, _ in np.asarray(poses):
        known = bool(np.isfinite(x) and np.isfinite(y))
        if known:
            text.append(f"{'L' if down else 'M'}{x:.2f} {y:.2f}")
        down = known
    return "".join(text)


def _legend(drawn: TrailMap, styles: Styles) -> Markup:
    items = [tag("li", sample(styles[trail.label]), " ", trail.label) for trail in drawn.trails]
    if drawn.reference is not None:
        items.append(_item(tag("path", class_="trail reference-trail", d="M1 7H35"), "reference pose"))
    if any(len(trail.locks) for trail in drawn.trails):
        star = tag("path", class_="lock-mark", d=STAR, transform="translate(18 7) scale(6)")
        items.append(_item(star, "locked here"))
    if any(np.any(trail.lost) for trail in drawn.trails):
        cross = tag("path", class_="lost-mark", d=CROSS, transform="translate(18 7) scale(4)")
        items.append(_item(cross, "estimate while lost"))
    items += patch_items(drawn.patches)
    return tag("ul", *items, class_="legend")


def patch_items(patches: Sequence[PlacePatch]) -> list[Markup]:
    """Legend entries of the kinds of patches that occur."""
    kinds = {patch.kind for patch in patches}
    return [
        _item(tag("path", class_=f"patch-{kind}", d="M11 1H25V13H11Z"), look.words)
        for kind, look in PATCH_LOOKS.items()
        if kind in kinds
    ]


def _item(part: Markup, words: str) -> Markup:
    return tag("li", tag("svg", part, class_="sample plan s0", **SAMPLE), join([" ", words]))

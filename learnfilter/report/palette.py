"""Colours with a second cue each, and the one scale on which beliefs are drawn.

Lines take their colours from Okabe and Ito (2008), chosen to stay apart under colour blindness; every
line also has its own dash and marker.  Beliefs use viridis on a logarithmic scale.
"""

from __future__ import annotations

import base64
import io
from dataclasses import dataclass

import matplotlib
import numpy as np
from numpy.typing import NDArray
from PIL import Image

from learnfilter.core.shapes import check
from learnfilter.render.site import Site

# Less mass in one cell than this is drawn as nothing.  Higher hides the wide beliefs of the first
# strips on a large site; lower paints every cell that the filter's floor keeps alive.
MASS_FLOOR = 1e-5
LOOKS = {"by-day": "viridis_r", "by-night": "viridis"}  # on light paper, on dark
LEVELS = 64  # steps of the scale; more cost file size and no eye sees them


@dataclass(frozen=True)
class LineStyle:
    """Colour (for pictures; pages take it from their style sheet), SVG dash and marker."""

    colour: str
    dash: str
    marker: str


LINE_STYLES = (
    LineStyle("#0072b2", "none", "circle"),
    LineStyle("#d55e00", "7 3", "square"),
    LineStyle("#009e73", "2 3", "triangle"),
    LineStyle("#b0578d", "9 3 2 3", "diamond"),
    LineStyle("#a87400", "12 4", "cross"),
    LineStyle("#2f8fc4", "4 2", "bar"),
)


@dataclass(frozen=True)
class PatchLook:
    """Colour (pages take theirs from the style sheet), what it says, and whether the square is filled."""

    colour: str
    words: str
    filled: bool


# What is gone leaves an empty square, what is new fills one: told apart without colour.
PATCH_LOOKS = {
    "gone": PatchLook("#7b3fb5", "not as drawn: looked through", False),
    "new": PatchLook("#e69f00", "something new here", True),
}


def mass_levels(mass: NDArray) -> NDArray[np.uint8]:
    """Probability of a cell to a level in 0..LEVELS-1: logarithmic from MASS_FLOOR to 1."""
    part = 1 - np.log(np.maximum(mass, MASS_FLOOR)) / np.log(MASS_FLOOR)
    return np.rint(np.clip(part, 0, 1) * (LEVELS - 1)).astype(np.uint8)


def value_levels(values: NDArray) -> tuple[NDArray[np.uint8], float, float]:
    """Any values to levels 1..LEVELS-1, linear between their extremes (returned); NaN to 0."""
    finite = np.isfinite(values)
    low, high = (float(values[finite].min()), float(values[finite].max())) if finite.any() else (0.0, 0.0)
    part = np.where(finite, values - low, 0) / ((high - low) or 1.0)
    return np.where(finite, 1 + np.rint(part * (LEVELS - 2)), 0).astype(np.uint8), low, high


def scale_colours(look: str) -> NDArray[np.uint8]:
    """[LEVELS 4] RGBA, nothing to much: clear, then viridis towards the end that stands out."""
    part = np.linspace(0, 1, LEVELS)
    rgba = matplotlib.colormaps[LOOKS[look]](part)
    rgba[:, 3] = np.minimum(1.0, 0.25 + 1.1 * part)
    rgba[0, 3] = 0.0
    return np.rint(rgba * 255).astype(np.uint8)


def downsample(mass: NDArray, side: int = 96) -> tuple[NDArray, int]:
    """Sum blocks of cells until neither side of [t r c] exceeds `side`.

    Returns:
        The smaller array (its total unchanged) and the side of a block in cells.
    """
    sizes = check("mass", mass, "t r c")
    block = -(-max(sizes["r"], sizes["c"]) // side)
    rows, columns = -(-sizes["r"] // block), -(-sizes["c"] // block)
    padded = np.zeros((sizes["t"], rows * block, columns * block), dtype=np.float64)
    padded[:, : sizes["r"], : sizes["c"]] = mass
    return padded.reshape(sizes["t"], rows, block, columns, block).sum(axis=(2, 4)), block


def png_uri(levels: NDArray[np.uint8], look: str) -> str:
    """A data URI of [r c] levels (first row on top) in the colours of a look."""
    colours = scale_colours(look)
    rows, columns = levels.shape
    image = Image.frombytes("P", (columns, rows), np.ascontiguousarray(levels).tobytes())
    image.putpalette(colours[:, :3].tobytes())
    buffer = io.BytesIO()
    image.save(buffer, "PNG", transparency=colours[:, 3].tobytes(), optimize=True)
    return "data:image/png;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")


def belief_image(site: Site, log_belief: NDArray) -> NDArray[np.uint8]:
    """A belief as a picture, for training logs.

    Args:
        site: whose live cells are told from the rest.
        log_belief: [h r c] log-probability of each pose, nats.

    Returns:
        [r c 3] sRGB bytes, largest y on top; grey where a cell is not live.
    """
    headings, rows, columns = site.grid.shape
    check("log_belief", log_belief, "h r c", h=headings, r=rows, c=columns)
    mass = np.exp(np.asarray(log_belief, dtype=np.float64)).sum(axis=0)
    colours = scale_colours("by-day").astype(float)
    alpha = colours[:, 3:] / 255
    on_white = np.rint(colours[:, :3] * alpha + 255 * (1 - alpha)).astype(np.uint8)
    image = np.where(site.live[..., None], on_white[mass_levels(mass)], np.uint8(150))
    return image[::-1].astype(np.uint8)

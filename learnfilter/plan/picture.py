"""Read a plan from a picture: a PNG whose grey levels say wall, free floor, or nothing known.

A picture says neither its scale nor what its greys mean, and the trade agrees on neither, so both are
asked for.  Colours count by their luma (ITU-R BT.601), transparent pixels lie on white paper, and of 16
bits the upper 8 count.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import shapely
from numpy.typing import NDArray
from PIL import Image, PngImagePlugin

from learnfilter.core.errors import PlanError
from learnfilter.plan.builder import PlanBuilder
from learnfilter.plan.floorplan import WALL, FloorPlan

# In this order: a block of pixels is the highest of its pixels.  So a line thinner than a block stays, and
# a block is floor only where all of it is.
_FREE, _UNKNOWN, _WALL = range(3)
# Finer pixels are joined to blocks of at least this side, by which no surface moves as much.  Smaller:
# segments by the hundred thousand, and the two sides of a thin line pass for one wall drawn twice.
FINEST_M = 0.02
# What a picture of a building may measure along its longer side.
EXTENT_M = (1.0, 2000.0)
# A laptop still decodes this many (1.6 GB with colour and transparency); beyond, none is.
MOST_PIXELS = 400_000_000
# Rows made grey at a time: all at once would hold the picture three times over.
_BAND_ROWS = 256
# So many of a picture's greys a message names.
_GREYS_NAMED = 6


def read_picture(
    path: str | Path,
    *,
    metres_per_pixel: float | None = None,
    wall_grey: Sequence[int] | None = None,
    free_grey: Sequence[int] | None = None,
    left_m: float = 0.0,
    bottom_m: float = 0.0,
) -> FloorPlan:
    """Read a plan from a PNG: wall pixels are solid walls, pixels neither wall nor free are unmapped area.

    Args:
        path: the file; its first row is its top.
        metres_per_pixel: scale, must be given.
        wall_grey, free_grey: lowest and highest grey level of walls and of free floor, 0 (black) to 255
            (white), must be given.
        left_m, bottom_m: of the picture's lower left corner in the site frame.

    Returns:
        Walls along the outlines of the pixels (or blocks, see FINEST_M), one feature a connected area.

    Raises:
        PlanError: the file is no picture, an option is missing or makes no sense, or the picture shows
            no wall or no free floor.
    """
    path = Path(path)
    grey = _grey(path)
    if metres_per_pixel is None or wall_grey is None or free_grey is None:
        needed = {
            "site.metres_per_pixel=...": metres_per_pixel,
            "site.wall_grey=[low,high]": wall_grey,
            "site.free_grey=[low,high]": free_grey,
        }
        raise PlanError(
            f"a picture says neither its scale nor what its greys mean; it is mostly {_common(grey)}",
            file=path,
            expected=", ".join(setting for setting, value in needed.items() if value is None),
        )
    _check_frame(path, grey, metres_per_pixel, left_m, bottom_m)
    _check_greys(path, wall_grey, free_grey)
    # FINEST_M may be a whole number of pixels: the last bits shall not make it one more
    block = max(1, math.ceil(FINEST_M / metres_per_pixel - 1e-9))
    areas = _areas(grey, wall_grey, free_grey, block)
    for word, greys, area in (("wall", wall_grey, _WALL), ("free", free_grey, _FREE)):
        if not (areas == area).any():
            raise PlanError(
                f"nothing in the picture is {word}",
                file=path,
                place=f"site.{word}_grey",
                expected=f"greys of the picture, which is mostly {_common(grey)}",
                got=list(greys),
            )
    corner, block_m = np.array([left_m, bottom_m]), block * metres_per_pixel
    builder = PlanBuilder()
    for number, rings in enumerate(outlines(areas == _WALL)):
        builder.solid([corner + ring * block_m for ring in rings], WALL, number)
    for rings in outlines(areas == _UNKNOWN):
        builder.unmapped([corner + ring * block_m for ring in rings])
    return builder.build(path, name=path.stem)


def outlines(mask: NDArray[np.bool_]) -> list[list[NDArray[np.float64]]]:
    """The areas of a mask [rows columns]; pixels that share no more than a corner are not joined.

    Returns:
        For each area its outer ring and its holes, [k 2] column and row of the corners, closed; the
        pixel [row, column] reaches from (column, row) to (column + 1, row + 1).
    """
    padded = np.pad(mask, 1)
    here, right, below, across = padded[:-1, :-1], padded[:-1, 1:], padded[1:, :-1], padded[1:, 1:]
    # a lattice point is a corner of one outline, or of two where areas touch diagonally
    corners = (here ^ right ^ below ^ across) + 2 * ((here == across) & (right == below) & (here != right))
    # along every line of the lattice an edge runs from each corner with an even number to the next
    along_y, along_x = (np.argwhere(lines) for lines in (corners.T, corners))
    along_y = np.repeat(along_y, corners.T[tuple(along_y.T)], axis=0)
    along_x = np.repeat(along_x, corners[tuple(along_x.T)], axis=0)[:, ::-1]
    edges = np.concatenate([along_x, along_y]).reshape(-1, 2, 2).astype(float)
    faces = shapely.get_parts(shapely.polygonize(shapely.linestrings(edges)))
    x, y = shapely.get_coordinates(shapely.point_on_surface(faces)).T.astype(int)
    return [
        [np.asarray(ring.coords) for ring in (face.exterior, *face.interiors)] for face in faces[mask[y, x]]
    ]


def _grey(path: Path) -> Image.Image:
    """The picture in 8 bits of grey.

    Opened as what it must be: the library's general opener knows formats that no plan comes in, and
    refuses large pictures by a limit that only the whole process can change.
    """
    try:
        file = path.open("rb")
    except OSError as error:
        raise PlanError("the plan cannot be opened", file=path, got=error.strerror) from error
    with file:
        try:
            picture = PngImagePlugin.PngImageFile(file)
            if picture.width * picture.height <= MOST_PIXELS:
                picture.load()
        except (OSError, SyntaxError, ValueError) as error:
            raise PlanError(
                "the picture cannot be read", file=path, expected="a whole PNG", got=error
            ) from error
    width, height = picture.size
    if width * height > MOST_PIXELS:
        raise PlanError(
            "the picture is too large",
            file=path,
            expected=f"at most {MOST_PIXELS:,} pixels",
            got=f"{width:,} x {height:,}",
        )
    grey = Image.new("L", picture.size)
    for top in range(0, height, _BAND_ROWS):
        band = picture.crop((0, top, width, min(top + _BAND_ROWS, height)))
        grey.paste(_band_grey(band), (0, top))
    return grey


def _band_grey(band: Image.Image) -> Image.Image:
    if band.mode == "I;16":
        levels = np.asarray(band)
        levels = np.where(levels == band.info.get("transparency"), 0xFFFF, levels)
        return Image.fromarray((levels >> 8).astype(np.uint8))
    if band.has_transparency_data:
        paper = Image.new("RGBA", band.size, "white")
        paper.alpha_composite(band.convert("RGBA"))
        band = paper
    return band.convert("L")


def _check_frame(
    path: Path, grey: Image.Image, metres_per_pixel: float, left_m: float, bottom_m: float
) -> None:
    extent_m = metres_per_pixel * max(grey.size)
    low, high = EXTENT_M
    if not low <= extent_m <= high:
        raise PlanError(
            f"the picture would be {extent_m:g} m across",
            file=path,
            place="site.metres_per_pixel",
            expected=f"{low:g} to {high:g} m for {max(grey.size):,} pixels",
            got=metres_per_pixel,
        )
    if not (math.isfinite(left_m) and math.isfinite(bottom_m)):
        place = "site.left_m, site.bottom_m"
        raise PlanError("no place", file=path, place=place, expected="metres", got=f"{left_m}, {bottom_m}")


def _check_greys(path: Path, wall_grey: Sequence[int], free_grey: Sequence[int]) -> None:
    for word, greys in (("wall", wall_grey), ("free", free_grey)):
        if len(greys) != 2 or not 0 <= greys[0] <= greys[1] <= 255:
            raise PlanError(
                "no range of greys",
                file=path,
                place=f"site.{word}_grey",
                expected="[low, high] within 0 (black) to 255 (white)",
                got=list(greys),
            )
    if wall_grey[0] <= free_grey[1] and free_grey[0] <= wall_grey[1]:
        raise PlanError(
            "a grey cannot be both wall and free",
            file=path,
            place="site.wall_grey, site.free_grey",
            expected="ranges that share no grey",
            got=f"{list(wall_grey)} and {list(free_grey)}",
        )


def _common(grey: Image.Image) -> str:
    """The most frequent greys of a picture with their shares, for messages."""
    counts = np.array(grey.histogram())
    levels = np.argsort(-counts, kind="stable")[:_GREYS_NAMED]
    return ", ".join(f"{level} ({counts[level] / counts.sum():.1%})" for level in levels if counts[level])


def _areas(
    grey: Image.Image, wall_grey: Sequence[int], free_grey: Sequence[int], block: int
) -> NDArray[np.uint8]:
    """[rows columns] what each block of pixels is, row 0 at the bottom."""
    meaning = [_UNKNOWN] * 256
    for greys, area in ((wall_grey, _WALL), (free_grey, _FREE)):
        meaning[greys[0] : greys[1] + 1] = [area] * (greys[1] + 1 - greys[0])
    areas = np.asarray(grey.point(meaning))[::-1]
    for axis in (0, 1):
        areas = np.maximum.reduceat(areas, np.arange(0, areas.shape[axis], block), axis=axis)
    return areas

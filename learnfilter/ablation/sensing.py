# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""How likely a strip is at a pose, when the world and the sensor's faults are known.

A cell of the oracle's lattice is wider than the sensor's noise, and where in its cell the robot
stands moves all columns together.  So a pose's likelihood is the mean over its cell: each column is a
mixture over the surfaces it can meet from there, and offset.py integrates.  Taking columns for
independent with a wider spread instead is tens of nats too sure at cell borders.

On 40 unseen sites of 12 x 12 m mean nats after 1, 2, 4 and 8 strips were .38 .43 .61 .35 with columns
as they are and .38 .35 .55 .37 at exponent 0.6, where fewer were located after one: no exponent is used.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from learnfilter.ablation.known import Known
from learnfilter.ablation.offset import Mixture, mean_over_cell
from learnfilter.ablation.surroundings import NOTHING, cast_world, facing

# Spread of the offset within a cell, in cells.  Smaller and the kernels of neighbouring cells leave
# gaps between them, larger and they blur what is known: at 0.35 their sum is even to 18 %.
WITHIN = 0.35
# Rays a bearing from which surfaces are gathered, and how many to either side: an offset turns a column
# by one bearing and a half at most, and what is narrower than a bearing must not be missed.
RAYS, ASIDE = 4, 6
SURFACES = 4  # kept a column; its last part is a pane of glass
PANE = SURFACES
# Chance that a column's footprint covers both surfaces where it can meet two.
SPLIT = 0.25
# Share of columns that meet what was not gathered (a corner within the cell): without it, one such
# column can cost the true pose hundreds of nats.
STRAY = 0.01
BAND = 16  # rows whose rings are held at once: a large site's would fill the memory
LEAST_COSINE = 0.02


class _Place(NamedTuple):
    """The lattice and the strip as numbers."""

    first: int
    per_heading: int
    turn: float
    cell: float
    left: float
    bottom: float
    has_colour: bool
    prior: NDArray[np.float64]  # [3] variance of x, y and heading within a cell


class _Column(NamedTuple):
    """What one column can meet, [k] each: weight, surface, ray it was found by, and what follows."""

    weight: NDArray[np.float64]
    surface: NDArray[np.int64]
    ray: NDArray[np.int64]
    reach: NDArray[np.float64]  # measured range to expect, inf for nothing
    seen: NDArray[np.float64]  # chance that a reading comes back
    gone: NDArray[np.float64]  # chance that none does, beyond reach included
    loose: NDArray[np.float64]  # share by which brightness varies within the cell
    mean: NDArray[np.float64]  # [k 3] linear colour


def strip_log_likelihood(known: Known, step: int, poses: NDArray[np.int64]) -> NDArray[np.float64]:
    """Log-likelihood of a strip at some poses, mean over each pose's cell.

    Args:
        known: the world, the sensor and its strips.
        step: which strip.
        poses: [m 3] heading, row and column on the oracle's lattice.

    Returns:
        [m] nats, up to a constant a strip.
    """
    grid, layout = known.grid, known.layout
    within = WITHIN * np.array([grid.cell_m, grid.cell_m, grid.heading_step_rad])
    place = _Place(
        layout.first, layout.bearings_per_heading, grid.heading_step_rad, grid.cell_m, grid.left_m,
        grid.bottom_m, known.rgb is not None, within**2,
    )  # fmt: skip
    rgb = known.rgb[step] if known.rgb is not None else np.zeros((layout.columns, 3))
    used = np.flatnonzero(known.usable()[step])
    strip = used, known.bearings_rad[used], known.depth_m[step, used], rgb[used]
    out = np.empty(len(poses))
    for band in np.unique(poses[:, 1] // BAND):
        among = poses[:, 1] // BAND == band
        cells = np.zeros(grid.shape[1:], bool)
        cells[tuple(poses[among, 1:].T)] = True
        rings = cast_world(known, cells, step, RAYS)
        out[among] = _look(poses[among], *strip, place, rings, known.things.albedo, known.glow, known.faults)
    return out


@njit(cache=True)
def _look(poses, used, bearing, depth, rgb, place, rings, albedo, glow, faults):
    out = np.empty(len(poses))
    count, parts = len(used), SURFACES + 1
    mixture = Mixture(
        depth / faults.range_scale, np.zeros(count), np.zeros(count), np.zeros((count, parts)),
        np.ones((count, parts)), np.zeros((count, parts, 3)), np.zeros((count, parts), np.bool_),
        np.zeros(count),
    )  # fmt: skip
    column = _Column(
        np.zeros(parts), np.zeros(parts, np.int64), np.zeros(parts, np.int64), np.zeros(parts),
        np.zeros(parts), np.zeros(parts), np.zeros(parts), np.zeros((parts, 3)),
    )  # fmt: skip
    for m in range(len(poses)):
        n = rings.number[poses[m, 1], poses[m, 2]]
        for w in range(count):
            ray = RAYS * (poses[m, 0] * place.per_heading + place.first + used[w]) % len(rings.angles)
            angle = poses[m, 0] * place.turn + bearing[w]
            mixture.ux[w], mixture.uy[w] = math.cos(angle), math.sin(angle)
            _gather(rings, n, ray, place, column)
            for k in range(parts):
                if column.weight[k] > 0:
                    _expect(rings, n, k, w, place, albedo, glow, faults, column, mixture)
            _judge(depth[w], rgb[w], w, place.has_colour, faults, column, mixture)
        out[m] = mean_over_cell(mixture, place.prior)
    return out


@njit(cache=True)
def _gather(rings, n, ray, place, column):
    """Surfaces that a column can meet from anywhere in the cell, with the chance of each."""
    column.weight[:] = 0.0
    across = place.cell / (max(rings.range_m[n, ray], 0.2) * place.turn)
    step = 2 * math.pi / len(rings.angles) / place.turn  # between rays, in headings
    narrow = 0.5 * (step / WITHIN) ** 2 / (1 + across * across)
    found, total = 0, 0.0
    for i in range(2 * ASIDE + 1):
        j = (i + 1) // 2 if i % 2 else -(i // 2)  # from the middle outwards
        p = (ray + j) % len(rings.angles)
        chance, s = math.exp(-narrow * j * j), rings.surface[n, p]
        k = 0
        while k < found and column.surface[k] != s:
            k += 1
        if k == found and found < SURFACES:
            column.surface[k], column.ray[k] = s, p
            found += 1
        if k < found:
            column.weight[k] += chance
            total += chance
    column.weight[:] /= total
    if rings.pane_m[n, ray] < rings.range_m[n, ray]:
        column.weight[PANE], column.surface[PANE], column.ray[PANE] = 1.0, rings.pane[n, ray], ray


@njit(cache=True)
def _expect(rings, n, k, w, place, albedo, glow, faults, column, mixture):
    """Range, spread, colour and chance to fail of the surface that part k of a column meets."""
    s, p = column.surface[k], column.ray[k]
    column.reach[k], column.seen[k], column.gone[k], column.loose[k] = np.inf, 0.0, 1.0, 0.0
    if s == NOTHING:
        column.mean[k] = glow.rgb * glow.beyond
        return
    ux, uy = mixture.ux[w], mixture.uy[w]
    vx, vy = math.cos(rings.angles[p]), math.sin(rings.angles[p])
    met = float(rings.pane_m[n, p] if k == PANE else rings.range_m[n, p])
    nx, ny = facing(rings, n, vx, vy, met, s)
    cosine = max(nx * ux + ny * uy, LEAST_COSINE)
    d = met * (nx * vx + ny * vy) / cosine  # the surface goes on straight from where the ray met it
    mixture.is_disc[w, k] = s >= len(rings.normals)
    if mixture.is_disc[w, k]:
        r = rings.radius_m
        mixture.shape[w, k] = met * vx + r * nx, met * vy + r * ny, r
    else:
        mixture.shape[w, k] = nx, ny, d * cosine
    turn = d * (uy * nx - ux * ny)
    swing = (place.prior[0] + turn * turn * place.prior[2]) / (cosine * cosine)
    i = min(int(d / faults.range_step_m + 0.5), len(faults.spread_m) - 1)
    j = int(cosine * (faults.spread_m.shape[1] - 1) + 0.5)
    mixture.noise[w, k] = faults.spread_m[i, j] ** 2
    light = 0.2126 * albedo[s, 0] + 0.7152 * albedo[s, 1] + 0.0722 * albedo[s, 2]
    column.reach[k] = faults.range_scale * d
    column.seen[k] = 1 - (light * faults.missing_white[i, j] + (1 - light) * faults.missing_black[i, j])
    beyond = (faults.max_range_m / faults.range_scale - d) / math.sqrt(2 * (mixture.noise[w, k] + swing))
    column.gone[k] = 1 - column.seen[k] * (0.5 + 0.5 * math.erf(beyond))
    # a reading of the surface itself says where in the cell the light was seen from
    doubt = math.sqrt(swing)
    if (mixture.depth[w] - d) ** 2 < 16 * (swing + mixture.noise[w, k]):
        d, doubt = mixture.depth[w], 0.0
    lamp = glow.lamp * cosine / max(d, glow.lamp_near_m) ** 2
    bright = lamp + _ambient(
        glow, rings.x[n] + d * ux - place.left, rings.y[n] + d * uy - place.bottom, place
    )
    column.loose[k] = 2 * lamp / bright * doubt / max(d, glow.lamp_near_m)
    column.mean[k] = glow.rgb * bright * albedo[s]


@njit(cache=True)
def _ambient(glow, x, y, place):
    row = min(max(int(y / place.cell), 0), glow.ambient.shape[0] - 1)
    return glow.ambient[row, min(max(int(x / place.cell), 0), glow.ambient.shape[1] - 1)]


@njit(cache=True)
def _judge(depth, rgb, w, has_colour, faults, column, mixture):
    """Turn what a column can meet and what it measured into parts of a mixture."""
    mixture.share[w] = 0.0
    rest, wide = 0.0, faults.max_range_m - faults.min_range_m
    returns = (
        1.0 if has_colour else 1 - faults.dropped
    )  # with colour, lost columns are told from lost readings
    passes = 1.0
    if column.weight[PANE] > 0:  # all of a column's rays fare alike in glass
        passed = faults.glass_through + faults.glass_none
        passes, column.weight[PANE] = faults.glass_through / passed, 1 - passed
        column.weight[:PANE] *= passed
    for k in range(SURFACES + 1):
        if column.weight[k] == 0.0:
            continue
        believed = column.weight[k] * (_shade(rgb, k, faults, column) if has_colour else 1.0)
        comes = returns if k == PANE else returns * passes
        if depth != depth:
            rest += believed * ((1 - STRAY) * (1 - comes * (1 - column.gone[k])) + 0.5 * STRAY)
            continue
        rest += believed * 0.5 * STRAY / wide
        reach, believed = column.reach[k], believed * (1 - STRAY) * comes * column.seen[k]
        if faults.min_range_m <= depth <= reach < np.inf:
            rest += believed * faults.short / max(reach - faults.min_range_m, 0.05)
        low, high = min(reach, column.reach[0]), max(reach, column.reach[0])
        if k < PANE and low <= depth <= high < np.inf and high - low > 0.1:
            rest += 2 * SPLIT * believed * faults.mixed / (high - low)
        if reach < np.inf:
            mixture.share[w, k] = believed * (1 - faults.short) / faults.range_scale
    mixture.rest[w] = rest


@njit(cache=True)
def _shade(rgb, k, faults, column):
    """Density of a column's colour where its centre meets part k; the footprint may cover an edge."""
    density, others, loose = 0.0, 0, column.loose[k]
    for o in range(SURFACES):
        if k != PANE and o != k and column.weight[o] > 0.02:
            density += _gaussian_colour(rgb, column.mean[k], column.mean[o], 1 / 3, loose, faults)
            others += 1
    clean = _gaussian_colour(rgb, column.mean[k], column.mean[k], 0.0, loose, faults)
    density = (1 - SPLIT) * clean + SPLIT * density / others if others else clean
    return (1 - STRAY) * density + STRAY  # a stray colour has density 1 on the unit cube


@njit(cache=True)
def _gaussian_colour(rgb, mean, other, blend, loose, faults):
    total, scale = 0.0, (2 * math.pi) ** 1.5
    for c in range(3):
        middle = min((1 - blend) * mean[c] + blend * other[c], 1.0)
        noise = faults.colour_sd + faults.colour_sd_share * middle
        spread = math.sqrt(noise * noise + (loose * middle) ** 2)
        total += ((rgb[c] - middle) / spread) ** 2
        scale *= spread
    return math.exp(-0.5 * total) / scale

# mypy: allow-untyped-defs
# (numba infers the types of kernels; everything else here says its types)
"""Rings of the true world, people included, and a rough score of every pose on them."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from learnfilter.ablation.known import Known
from learnfilter.render.rays import build_scene, cast_fan

NOTHING = -1
# The rough score: nats a column can lose, how steep a surface is taken to be at most, and what a
# reading that failed to come back costs.
MOST_LOSS, LEAST_COSINE, GONE_LOSS = 4.0, 0.1, 2.0


class Rings(NamedTuple):
    """What surrounds some cells at one step.

    Attributes:
        number: [r c] of each cell, -1 elsewhere.
        x, y: [n] centres, metres.
        angles: [p] site angle of each bearing, as the turned sensor meets them.
        range_m, surface: [n p] what a ray meets, numbered as albedos are; inf and NOTHING.
        pane_m, pane: [n p] the glass it meets first; inf and NOTHING.
        normals: [k + g 2] of solid and glass; people have those of discs.
        discs: [i 2] people.
        radius_m: of each of them.
    """

    number: NDArray[np.int64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    angles: NDArray[np.float64]
    range_m: NDArray[np.float32]
    surface: NDArray[np.int32]
    pane_m: NDArray[np.float32]
    pane: NDArray[np.int32]
    normals: NDArray[np.float64]
    discs: NDArray[np.float64]
    radius_m: float


def cast_world(known: Known, cells: NDArray[np.bool_], step: int, rays: int = 1) -> Rings:
    """Rings at some cells [r c] as the world is at a step, `rays` a bearing of the oracle's layout."""
    grid, layout, things, sight = known.grid, known.layout, known.things, known.faults.sight_m
    row, column = np.nonzero(cells)
    number = np.full(cells.shape, -1)
    number[row, column] = np.arange(len(row))
    x, y = grid.x_centres()[column], grid.y_centres()[row]
    turned = np.nanmedian(known.bearings_rad - layout.strip_bearings())
    angles = layout.phase_rad + turned + np.arange(layout.bearings * rays) * layout.step_rad / rays
    range_m, surface = cast_fan(build_scene(things.solid), x, y, angles, sight)
    pane_m, pane = np.full(range_m.shape, np.inf, np.float32), np.full(range_m.shape, NOTHING, np.int32)
    if len(things.glass):
        pane_m, pane = cast_fan(build_scene(things.glass), x, y, angles, sight)
        pane[pane >= 0] += len(things.solid)
    lines = np.vstack([things.solid, things.glass])
    along = lines[:, 2:] - lines[:, :2]
    length = np.maximum(np.linalg.norm(along, axis=1, keepdims=True), 1e-12)
    normals = np.stack([-along[:, 1], along[:, 0]], axis=1) / length
    discs = things.discs[step]
    _stand(x, y, angles, discs, things.disc_radius_m, things.aside_m, len(lines), range_m, surface)
    return Rings(
        number, x, y, angles, range_m, surface, pane_m, pane, normals, discs, things.disc_radius_m
    )  # fmt: skip


def rough_scores(known: Known, rings: Rings, step: int) -> NDArray[np.float32]:
    """[n h] rough nats of a strip at every cell of rings with one ray a bearing, from depth alone.

    Columns count as independent with the spread that a pose anywhere in its cell has, and each loses
    MOST_LOSS at most: cheap enough for millions of poses.
    """
    out = np.zeros((len(rings.x), known.grid.headings), np.float32)
    depth = np.where(known.usable()[step], known.depth_m[step], np.inf) / known.faults.range_scale
    place = (known.layout.first, known.layout.bearings_per_heading, known.grid.heading_step_rad)
    _score(depth, *place, known.grid.cell_m, rings, known.faults, out)
    return out


@njit(cache=True)
def _stand(x, y, angles, discs, radius, aside, fixed, range_m, surface):
    """Put people before what rays meet; they are numbered from `fixed` on."""
    ux, uy = np.cos(angles), np.sin(angles)
    for n in range(len(x)):
        for i in range(len(discs)):
            dx, dy = discs[i, 0] - x[n], discs[i, 1] - y[n]
            if dx * dx + dy * dy < aside * aside:
                continue
            for p in range(len(angles)):
                ahead, off = dx * ux[p] + dy * uy[p], dy * ux[p] - dx * uy[p]
                if ahead > 0 and off * off < radius * radius:
                    near = ahead - math.sqrt(radius * radius - off * off)
                    if 0 < near < range_m[n, p]:
                        range_m[n, p], surface[n, p] = near, fixed + i


@njit(cache=True)
def facing(rings, n, ux, uy, reach, surface):
    """Normal of the surface that a ray from cell n meets, pointing away from the sensor."""
    if surface < len(rings.normals):
        nx, ny = rings.normals[surface, 0], rings.normals[surface, 1]
    else:
        i = surface - len(rings.normals)
        nx = (rings.discs[i, 0] - rings.x[n] - reach * ux) / rings.radius_m
        ny = (rings.discs[i, 1] - rings.y[n] - reach * uy) / rings.radius_m
    if nx * ux + ny * uy < 0:
        return -nx, -ny
    return nx, ny


@njit(cache=True)
def _soften(rings, n, ux, uy, turn, cell, faults, reach, sharp, cost):
    """Expected range of each bearing of a cell, 1 / (sqrt 2 spread) and the log of the spread."""
    for p in range(len(ux)):
        d, s = rings.range_m[n, p], rings.surface[n, p]
        reach[p], sharp[p], cost[p] = 1e3, 1.0, 0.0
        if d < 2 * faults.max_range_m:
            nx, ny = facing(rings, n, ux[p], uy[p], d, s)
            cosine = max(nx * ux[p] + ny * uy[p], LEAST_COSINE)
            swing = d * turn * math.sqrt(max(1 - cosine * cosine, 0.0))
            noise = faults.spread_m[min(int(d / faults.range_step_m), len(faults.spread_m) - 1), -1]
            spread = math.sqrt(noise * noise + (cell * cell + swing * swing) / (12 * cosine * cosine))
            reach[p], sharp[p], cost[p] = d, math.sqrt(0.5) / spread, math.log(spread)


@njit(cache=True)
def _score(depth, first, per_heading, turn, cell, rings, faults, out):
    bearings, columns = len(rings.angles), len(depth)
    ux, uy = np.cos(rings.angles), np.sin(rings.angles)
    reach = np.empty(bearings + columns, np.float32)
    sharp, cost = np.empty_like(reach), np.empty_like(reach)
    limit = faults.max_range_m / faults.range_scale
    most, gone = np.float32(MOST_LOSS), np.float32(GONE_LOSS)
    measured = depth.astype(np.float32)
    for n in range(len(rings.x)):
        _soften(rings, n, ux, uy, turn, cell, faults, reach, sharp, cost)
        reach[bearings:], sharp[bearings:], cost[bearings:] = reach[:columns], sharp[:columns], cost[:columns]
        for h in range(out.shape[1]):
            start = (h * per_heading + first) % bearings
            total = np.float32(0)
            for w in range(columns):
                if measured[w] == np.inf:
                    continue
                p = start + w
                if measured[w] != measured[w]:
                    total -= gone if reach[p] < limit else np.float32(0)
                else:
                    gap = (measured[w] - reach[p]) * sharp[p]
                    total -= min(gap * gap + cost[p], most)
            out[n, h] = total

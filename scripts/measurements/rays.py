"""How fast this package's ray caster is beside Embree's, on one plan and one thread.

Embree (through embreex, two triangles a wall, float32) is an industrial ray tracer.  Both cast the
same rays at the same 300-wall plan, taking turns so that a busy machine slows both; directions are
given to Embree ready made while ours computes them from angles, to Embree's favour.  Rates are by
the process's CPU time, since numba may cast in a thread of its own.
"""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from statistics import median

import numba
import numpy as np
from embreex.mesh_construction import TriangleMesh
from embreex.rtcore_scene import EmbreeScene
from numpy.typing import NDArray

from learnfilter.core.seeds import stream
from learnfilter.render.rays import build_scene, cast, cast_fan

WALLS, WIDTH_M, HEIGHT_M = 300, 40.0, 25.0
FAN = 250  # rays that share an origin, as on a ring


def measure(rays: int = 1_000_000, repeats: int = 9) -> dict[str, dict[str, float]]:
    """Ratios of rates (ours over Embree's) and the share of rays on which both agree within 1 cm.

    Args:
        rays: how many in each repeat.
        repeats: turns of each; the first, which compiles, is left out.

    Returns:
        `rays_vs_embreex` (random rays) and `ring_rays_vs_embreex` (fans) with value (median), low, high
        and n; rates in millions of rays a second; `rays_agree_with_embreex`, the share.
    """
    rng = stream(0, "measurements", "rays")
    walls = office(rng)
    scene, embree = build_scene(walls), embree_scene(walls)
    x, y = rng.uniform(0, WIDTH_M, rays), rng.uniform(0, HEIGHT_M, rays)
    angle = rng.uniform(-np.pi, np.pi, rays)
    fan = 2 * np.pi * np.arange(FAN) / FAN
    corners = slice(0, rays // FAN)

    threads = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        random = take_turns(
            lambda: cast(scene, x, y, angle, np.inf)[0], ask_embree(embree, x, y, angle), repeats
        )
        rings = take_turns(
            lambda: cast_fan(scene, x[corners], y[corners], fan, np.inf)[0].ravel(),
            ask_embree(
                embree, np.repeat(x[corners], FAN), np.repeat(y[corners], FAN), np.tile(fan, rays // FAN)
            ),
            repeats,
        )
    finally:
        numba.set_num_threads(threads)
    return {
        "rays_vs_embreex": summary(random["ours"] / random["embree"]),
        "ring_rays_vs_embreex": summary(rings["ours"] / rings["embree"]),
        "rays_million_a_second": summary(random["ours"]),
        "ring_rays_million_a_second": summary(rings["ours"]),
        "embreex_rays_million_a_second": summary(random["embree"]),
        "rays_agree_with_embreex": {"value": min(random["agree"], rings["agree"]), "n": rays},
    }


def office(rng: np.random.Generator) -> NDArray[np.float64]:
    """[300 4] an outer rectangle and inner walls of 0.8 to 4 m along either axis."""
    inner = WALLS - 4
    start = rng.uniform(0, (WIDTH_M, HEIGHT_M), (inner, 2))
    length, upright = rng.uniform(0.8, 4.0, inner), rng.random(inner) < 0.5
    end = start + np.where(upright[:, None], [0, 1], [1, 0]) * length[:, None]
    corner = np.array([(0, 0), (WIDTH_M, 0), (WIDTH_M, HEIGHT_M), (0, HEIGHT_M)])
    outer = np.hstack([corner, np.roll(corner, -1, axis=0)])
    return np.vstack([outer, np.hstack([start, np.minimum(end, (WIDTH_M, HEIGHT_M))])])


def embree_scene(walls: NDArray[np.float64]) -> EmbreeScene:
    """The walls as upright rectangles of two triangles each."""
    x0, y0, x1, y1 = walls.T
    down, up = np.full(len(walls), -1.0), np.full(len(walls), 1.0)
    a, b = np.stack([x0, y0, down], 1), np.stack([x1, y1, down], 1)
    c, d = np.stack([x1, y1, up], 1), np.stack([x0, y0, up], 1)
    scene = EmbreeScene()
    TriangleMesh(scene, np.stack([a, b, c, a, c, d], 1).reshape(-1, 3, 3).astype(np.float32))
    return scene


def ask_embree(scene: EmbreeScene, x: NDArray, y: NDArray, angle: NDArray) -> Callable[[], NDArray]:
    """A call that returns the ranges [k] of prepared rays, very large where nothing is met."""
    flat = np.zeros(len(x))
    origin = np.stack([x, y, flat], 1).astype(np.float32)
    direction = np.stack([np.cos(angle), np.sin(angle), flat], 1).astype(np.float32)
    return lambda: scene.run(origin, direction, query="DISTANCE")


def take_turns(ours: Callable[[], NDArray], embree: Callable[[], NDArray], repeats: int) -> dict:
    """Rates of both (million rays a second, [repeats]) and the share of equal answers."""
    expected, ranges = embree(), ours()
    rates = np.array([[rate(call, len(ranges)) for call in (ours, embree)] for _ in range(repeats)])
    agree = float(np.mean(np.abs(ranges - expected) < 0.01))
    return {"ours": rates[:, 0], "embree": rates[:, 1], "agree": agree}


def rate(call: Callable[[], NDArray], rays: int) -> float:
    """Million rays a second of CPU time."""
    start = time.process_time()
    call()
    return rays / (time.process_time() - start) / 1e6


def summary(values: NDArray[np.float64]) -> dict[str, float]:
    """Median, least, greatest and how many."""
    return {
        "value": median(values.tolist()),
        "low": float(values.min()),
        "high": float(values.max()),
        "n": len(values),
    }


if __name__ == "__main__":
    print(json.dumps(measure(), indent=2))

"""What steps cost in time and memory: ratios within one run, one thread, a process for each size."""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from _robot import matcher
from _runs import say
from numpy.typing import NDArray

from learnfilter.app.exporting import export_bundle
from learnfilter.core.colour import linear_to_srgb
from learnfilter.core.seeds import stream
from learnfilter.plan.floorplan import SHUT, Finish, FloorPlan
from learnfilter.runtime import Bundle, Estimate, Localizer, load_bundle
from learnfilter.runtime.part import Part
from learnfilter.runtime.table import RingTable
from learnfilter.sim.families import make_plan

POSES = 819_200
AREAS_M2 = (500, 2_000, 5_000, 20_000)
TURNS = 9  # of each thing that is timed, in turn
WALL_EVERY_M2 = 30.0
COLOURS = {"chalk": (0.9, 0.9, 0.88), "rust": (0.6, 0.25, 0.15), "slate": (0.3, 0.35, 0.4)}
# The long run: one strip in fifty is weighed, as where a robot stands still for much of its day.
SHORT_RUN, LONG_RUN, WEIGHED_EVERY = 10_000, 1_000_000, 50


def speed() -> dict[str, Any]:
    """A step that weighs every pose, beside a pass over the table; and a step of a robot that is locked."""
    with tempfile.TemporaryDirectory() as scratch:
        whole = _large(Path(scratch), 1_000, "fp32")
        weight = sum(file.stat().st_size for file in whole.folder.iterdir())
        area_m2 = len(whole.site.cells) * whole.site.grid.cell_m**2
        localizer = Localizer(_cut(side_by_side(whole, 2), POSES))
        lost, locked = _Lost(localizer), _Locked(localizer)
        times = _in_turn({"pass": _table_pass(localizer), "lost": lost, "locked": locked})
    full, locked_s, table = (np.array(times[name]) for name in ("lost", "locked", "pass"))
    return {
        "bundle_mb_per_1000_m2": weight / 1e6 / area_m2 * 1000,
        "poses": POSES,
        "full_step_vs_table_pass": _spread(full / table),
        "locked_step_vs_full": _spread(locked_s / full),
        "full_step_ms": float(np.median(full) * 1e3),
        "locked_step_ms": float(np.median(locked_s) * 1e3),
        "table_pass_ms": float(np.median(table) * 1e3),
    }


def area() -> dict[str, Any]:
    """Step times and memory of int8 bundles of growing sites, each in a process that does nothing else."""
    rows = []
    with tempfile.TemporaryDirectory() as scratch:
        least = _large(Path(scratch), AREAS_M2[0], "int8")
        for square_metres in AREAS_M2:
            say(f"area: {square_metres} m2")
            words = [sys.executable, __file__, str(least.folder), str(square_metres // AREAS_M2[0])]
            rows.append(json.loads(subprocess.run(words, check=True, stdout=subprocess.PIPE).stdout))
    for row in rows:
        row["full_vs_500_m2"] = row["full_step_ms"] / rows[0]["full_step_ms"]
        row["locked_vs_500_m2"] = row["locked_step_ms"] / rows[0]["locked_step_ms"]
    return {"area_growth": rows}


def memory() -> dict[str, Any]:
    """Growth of resident memory between two counts of strips, on a small site."""
    settings, model = matcher(0)
    plan = make_plan("offices", stream(0, "runtime", "memory"), 8.0, 8.0)
    with tempfile.TemporaryDirectory() as scratch:
        export_bundle(settings, model, plan, Path(scratch) / "bundle")
        localizer = Localizer(load_bundle(Path(scratch) / "bundle"))
    bundle, rng = localizer.bundle, stream(0, "runtime", "memory", "strips")
    depth = rng.uniform(0.3, 5.0, (997, bundle.strip.columns))
    rgb = rng.uniform(0.0, 1.0, (997, bundle.strip.columns, 3))
    still, along = np.zeros(3), np.array([0.05, 0.0, 0.25])
    held = {}
    for strip in range(1, LONG_RUN + 1):
        motion = still if strip % WEIGHED_EVERY else along
        localizer.step(motion, depth[strip % 997], rgb[strip % 997], float(strip))
        if strip in (SHORT_RUN, LONG_RUN):
            held[strip] = _resident_bytes()
        if strip % 100_000 == 0:
            say(f"memory: {strip:,} strips, {_resident_bytes() / 1e6:.0f} MB")
    return {"memory_growth": held[LONG_RUN] / held[SHORT_RUN] - 1, "resident_mb": held[LONG_RUN] / 1e6}


def _large(scratch: Path, square_metres: float, precision: str) -> Bundle:
    """A bundle of a warehouse with at least so many square metres of live cells."""
    settings, model = matcher(0)
    plan = warehouse(square_metres * 1.25)
    export_bundle(settings, model, plan, scratch / "bundle", precision=precision, usual=())
    bundle = load_bundle(scratch / "bundle")
    assert len(bundle.site.cells) * bundle.site.grid.cell_m**2 >= square_metres
    return bundle


def warehouse(square_metres: float) -> FloorPlan:
    """A square hall with a short wall for every WALL_EVERY_M2, in three colours."""
    rng, side = stream(0, "runtime", "warehouse"), float(np.sqrt(square_metres))
    corners = np.array([[0, 0], [side, 0], [side, side], [0, side], [0, 0]], float)
    outer = np.hstack([corners[:-1], corners[1:]])
    count = int(square_metres / WALL_EVERY_M2)
    start, length = rng.uniform(1.0, side - 5.0, (count, 2)), rng.uniform(1.0, 4.0, (count, 1))
    along = np.where(rng.random((count, 1)) < 0.5, [1.0, 0.0], [0.0, 1.0])
    segments = np.vstack([outer, np.hstack([start, start + length * along])])
    finishes = tuple(Finish(name, srgb) for name, srgb in COLOURS.items())
    blank = np.zeros(len(segments), np.int8)
    finish = rng.integers(0, len(finishes), len(segments)).astype(np.int16)
    return FloorPlan(
        segments, blank, blank + np.int8(SHUT), finish, blank.astype(np.int32), finishes, name="warehouse"
    )


def side_by_side(bundle: Bundle, copies: int) -> Bundle:
    """The bundle with its site so many times over, one above the other: as many cells as in a larger one."""
    site, grid = bundle.site, bundle.site.grid
    up = np.repeat(np.arange(copies) * grid.rows, len(site.cells))
    cells = np.tile(site.cells, (copies, 1)) + np.stack([up, np.zeros_like(up)], axis=1)
    rings: dict[str, Any] = {
        name: np.tile(getattr(site, name), (copies, 1)) for name in ("range_m", "unsure", "finish")
    }
    # copies larger and smaller than the first, or a robot could never tell where it is
    scale = stream(0, "runtime", "copies").uniform(0.5, 1.5, copies)
    rings["range_m"] = rings["range_m"] * np.repeat(scale, len(site.cells))[:, None].astype(np.float32)
    taller = replace(grid, rows=grid.rows * copies)
    return replace(bundle, site=replace(site, grid=taller, cells=cells, **rings))


def _cut(bundle: Bundle, poses: int) -> Bundle:
    """The bundle with its first cells alone."""
    count, site = poses // bundle.site.grid.headings, bundle.site
    rings = {name: getattr(site, name)[:count] for name in ("cells", "range_m", "unsure", "finish")}
    return replace(bundle, site=replace(site, **rings))


class _Lost:
    """A step of a robot that believes in every pose, and moves."""

    def __init__(self, localizer: Localizer):
        self.localizer, strip = localizer, localizer.bundle.strip
        rng = stream(0, "runtime", "lost")
        self.blank = np.full(strip.columns, np.nan)
        self.depth, self.rgb = rng.uniform(0.3, 5.0, strip.columns), rng.uniform(size=(strip.columns, 3))

    def ready(self) -> None:
        """Back to a uniform belief."""
        self.localizer.reset()
        self.localizer.step(np.zeros(3), self.blank)

    def __call__(self) -> None:
        answer = self.localizer.step((0.3, 0.05, 0.1), self.depth, self.rgb)
        assert answer.weighed


class _Locked:
    """A step of a robot that has found itself and sees what the plan predicts, to and fro."""

    def __init__(self, localizer: Localizer):
        self.localizer, self.turn = localizer, 0
        site, layout = localizer.bundle.site, localizer.bundle.site.layout
        looks_at = (layout.first + np.arange(layout.columns)) % layout.bearings
        ahead = site.range_m[:, looks_at]
        ahead = np.where(ahead <= localizer.bundle.strip.max_range_m, ahead, np.nan)
        in_a_row = (np.diff(site.cells, axis=0) == [0, 1]).all(axis=1)
        # where much is seen, and not all in one corner, so that it locks at one of them
        seen = np.isfinite(ahead).sum(axis=1) + np.nan_to_num(np.nanstd(ahead, axis=1))
        self.places = np.argsort(-np.where(in_a_row, seen[:-1], -1))[: 40 * 25 : 25].tolist()

    def ready(self) -> None:
        """Sure of one pose, at a place where strips speak for it."""
        grid, site = self.localizer.bundle.site.grid, self.localizer.bundle.site
        while self.places:
            self.localizer.reset()
            self()
            row, column = site.cells[self.places[0] + self.turn % 2]
            sure = np.zeros((grid.headings, 1, 1), np.float32)
            sure[0] = 1.0
            self.localizer._part = Part(sure, int(row), int(column))  # a large hall is slow to lock in
            for _ in range(4):
                self()
            if self.localizer._part.planes[0].size < 200:
                return
            self.places.pop(0)
        raise AssertionError("strips speak for no place")

    def __call__(self) -> Estimate:
        bundle, self.turn = self.localizer.bundle, self.turn + 1
        grid, layout = bundle.site.grid, bundle.site.layout
        cell = self.places[0] + self.turn % 2
        looks_at = (layout.first + np.arange(layout.columns)) % layout.bearings
        laid, source = bundle.site.range_m[cell, looks_at], np.array(layout.source)
        depth = np.full(bundle.strip.columns, np.nan)
        depth[source[source >= 0]] = laid[source >= 0]
        finish = bundle.site.finish[cell, looks_at]
        rgb = np.full((bundle.strip.columns, 3), np.nan)
        seen = (source >= 0) & (finish >= 0)
        rgb[source[seen]] = linear_to_srgb(bundle.site.palette[finish[seen]])
        depth[~np.isfinite(depth) | (depth > bundle.strip.max_range_m)] = np.nan
        step_m = grid.cell_m if self.turn % 2 else -grid.cell_m
        return self.localizer.step((step_m, 0.0, 0.0), depth, rgb)


def _table_pass(localizer: Localizer) -> Callable[[], Any]:
    """One multiplication of every number of the features' table: the least that a strip can cost."""
    table = localizer.features
    assert isinstance(table, RingTable)
    values = table.values.reshape(-1, table.values.shape[-1])
    ones = np.ones(values.shape[-1], values.dtype)
    return lambda: values @ ones


def _in_turn(things: dict[str, Any], turns: int = TURNS) -> dict[str, list[float]]:
    """Seconds of each thing, one after the other, so often; those that can are made ready first."""
    times: dict[str, list[float]] = {name: [] for name in things}
    for _ in range(turns):
        for name, thing in things.items():
            if hasattr(thing, "ready"):
                thing.ready()
            clock = time.perf_counter()
            thing()
            times[name].append(time.perf_counter() - clock)
    return times


def _spread(ratios: NDArray[np.float64]) -> dict[str, float]:
    """Median with the least and greatest of the turns."""
    low, high = float(ratios.min()), float(ratios.max())
    return {"value": float(np.median(ratios)), "low": low, "high": high, "n": len(ratios)}


def _peak_bytes() -> int:
    """Of this process alone; what getrusage says may be its parent's."""
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) * 1024 for line in lines if line.startswith("VmHWM"))


def _resident_bytes() -> int:
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * resource.getpagesize()


def _alone(folder: str, copies: int) -> dict[str, Any]:
    """What a bundle costs the process it is loaded in, its site so many times over."""
    clock = time.perf_counter()
    bundle = side_by_side(load_bundle(folder), copies)
    localizer = Localizer(bundle)
    lost = _Lost(localizer)
    lost.ready()
    loaded_s = time.perf_counter() - clock
    times = _in_turn({"lost": lost, "locked": _Locked(localizer)}, turns=3)
    cells = len(bundle.site.cells)
    return {
        "m2": cells * bundle.site.grid.cell_m**2,
        "poses": cells * bundle.site.grid.headings,
        "until_first_answer_s": loaded_s,
        "full_step_ms": float(np.median(times["lost"]) * 1e3),
        "locked_step_ms": float(np.median(times["locked"]) * 1e3),
        "peak_gb": _peak_bytes() / 1e9,
    }


if __name__ == "__main__":
    print(json.dumps(_alone(sys.argv[1], int(sys.argv[2]))))

"""What the robot gets, measured on the robot's side: one JSON object (scripts/measure runtime).

Models are those of `scripts/measure evidence` (three training seeds).  Sites are invented ones that no
training has seen.  One thread throughout; every ratio is taken within one run.  Progress goes to standard
error; trainings are kept in runs/measure-evidence.  Names of parts (`scripts/measure runtime watch`)
measure those alone.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
from collections.abc import Callable
from copy import copy
from dataclasses import replace
from pathlib import Path
from typing import Any

from learnfilter.app.threads import wait_passively

wait_passively()
os.environ |= dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "NUMBA_NUM_THREADS"), "1")

import numpy as np  # noqa: E402
from _robot import matcher, site, steps  # noqa: E402
from _runs import SEEDS, say  # noqa: E402
from _runtime_cost import area, memory, speed  # noqa: E402
from _runtime_watch import watch  # noqa: E402
from onnxruntime import InferenceSession  # noqa: E402

from learnfilter.ablation.statistics import paired_bootstrap  # noqa: E402
from learnfilter.app.exporting import export_bundle, filter_for  # noqa: E402
from learnfilter.core.poses import compose, through_mount  # noqa: E402
from learnfilter.core.seeds import stream  # noqa: E402
from learnfilter.drives.drive import Drive  # noqa: E402
from learnfilter.drives.metrics import located  # noqa: E402
from learnfilter.export.check import against_torch, total_variation  # noqa: E402
from learnfilter.export.onnx_files import STEP  # noqa: E402
from learnfilter.runtime import Bundle, Localizer, load_bundle  # noqa: E402

LONG_ROWS, STEPS = 560, 500
INT8_SITES, INT8_DRIVES, MARK = 8, 12, 4


def main() -> None:
    """Measure what is asked for and print it."""
    parts: dict[str, Callable[[], dict[str, Any]]] = {
        "faithful": faithful,
        "int8": int8,
        "speed": speed,
        "area": area,
        "memory": memory,
        "watch": watch,
        "imports": imports,
    }
    figures: dict[str, Any] = {}
    for name in sys.argv[1:] or parts:
        say(name)
        figures |= parts[name]()
    print(json.dumps(figures, indent=2))


def faithful() -> dict[str, Any]:
    """The runtime, its ONNX graph, and a runtime that skips nothing, against torch and each other."""
    runtime, onnx, skipping, size = [], [], [], {}
    for seed in SEEDS:
        settings, model = matcher(seed)
        plan, (drive,) = site(seed, LONG_ROWS, 1, settings)
        with tempfile.TemporaryDirectory() as scratch:
            folder = Path(scratch) / "bundle"
            size = export_bundle(settings, model, plan, folder)
            apart = against_torch(folder, filter_for(settings, model, plan), drive, STEPS)
            assert len(apart) == STEPS, len(apart)
            runtime.append(float(apart.max()))
            bundle = load_bundle(folder)
            onnx.append(onnx_apart(bundle, drive))
            skipping.append(skipping_apart(bundle, drive))
    over_drives = np.concatenate([each["over_drive"] for each in skipping])
    right = np.concatenate([each["right"] for each in skipping]).mean(axis=0)
    return {
        "runtime_tv": max(runtime),
        "onnx_tv": max(onnx),
        "skipping_tv": max(each["at_once"] for each in skipping),
        "skipping_over_drives": {
            "median_tv": float(np.median(over_drives)),
            "share_above_1e-3": float((over_drives > 1e-3).mean()),
            "located_with_skipping": float(right[0]),
            "located_without": float(right[1]),
        },
        "weights_kb": size["weights_bytes"] / 1024,
    }


def onnx_apart(bundle: Bundle, drive: Drive) -> float:
    """Worst total variation between the beliefs of the graph and of the runtime, each going its own way."""
    session = InferenceSession(str(bundle.folder / STEP))
    wanted = {given.name for given in session.get_inputs()}
    rings = {name: getattr(bundle.site, name) for name in ("range_m", "unsure", "palette", "field_m")}
    rings |= {name: getattr(bundle.site, name).astype(np.int64) for name in ("finish", "cells")}
    motions = through_mount(drive.odometry, np.asarray(bundle.strip.mount))
    localizer, worst, pending = Localizer(bundle), 0.0, np.zeros(3)
    belief = localizer.belief
    for row, answer in enumerate(steps(localizer, drive)):
        pending = compose(pending, motions[row]) if row else pending
        if not answer.weighed:
            continue
        given = {
            "belief": belief, "odometry": pending.astype(np.float32), "first": np.array(row == 0),
            "anew": np.array(answer.anew), "depth_m": drive.depth_m[row].astype(np.float32), **rings,
        }  # fmt: skip
        if drive.rgb is not None:
            given["rgb"] = drive.rgb[row].astype(np.float32)
        (belief,) = session.run(["belief_after"], {k: v for k, v in given.items() if k in wanted})
        worst, pending = max(worst, total_variation(localizer.belief, belief)), np.zeros(3)
    return worst


def skipping_apart(bundle: Bundle, drive: Drive) -> dict[str, Any]:
    """What leaving cells out changes: in one step from the same belief, and over a drive each goes alone."""
    every_cell = replace(bundle, weighing=replace(bundle.weighing, skip_below=0.0))
    quick, thorough = Localizer(bundle), Localizer(every_cell)
    assert drive.reference is not None
    at_once, over_drive, right = [], [], []
    for row in range(len(drive)):
        twin = copy(quick)
        twin._scale = thorough.scale  # the same state, weighed by the other rule
        given = drive.odometry[row], drive.depth_m[row], None if drive.rgb is None else drive.rgb[row]
        answer, other = quick.step(*given), thorough.step(*given)
        twin.step(*given)
        if not answer.weighed:
            continue
        at_once.append(total_variation(quick.belief, twin.belief))
        over_drive.append(total_variation(quick.belief, thorough.belief))
        right.append([float(located(each.pose, drive.reference[row])) for each in (answer, other)])
        if len(at_once) == STEPS:
            break
    return {"at_once": max(at_once), "over_drive": np.array(over_drive), "right": np.array(right)}


def int8() -> dict[str, Any]:
    """Located share after a few strips, lost by weights, rings and features in 8 bits."""
    right: dict[str, list[float]] = {"fp32": [], "int8": []}
    units: list[str] = []
    for seed in SEEDS:
        settings, model = matcher(seed)
        for number in range(INT8_SITES):
            plan, drives = site(number, MARK + 4, INT8_DRIVES, settings)
            with tempfile.TemporaryDirectory() as scratch:
                for precision, share in right.items():
                    folder = Path(scratch) / precision
                    export_bundle(settings, model, plan, folder, precision=precision, usual=())
                    localizer = Localizer(load_bundle(folder))
                    share += [located_after(localizer, drive, MARK) for drive in drives]
            units += [f"{seed}/{number}"] * len(drives)
    full, small = (np.array(share) for share in right.values())
    drop = paired_bootstrap(full, small, units, rng=stream(0, "runtime", "int8"))
    return {"int8_located_drop": drop.as_dict(), "int8_drives": len(full)}


def located_after(localizer: Localizer, drive: Drive, strips: int) -> float:
    """Whether the estimate is right after so many weighed strips."""
    localizer.reset()
    weighed = 0
    for row, answer in enumerate(steps(localizer, drive)):
        weighed += answer.weighed
        if weighed == strips:
            assert drive.reference is not None
            return float(located(answer.pose, drive.reference[row]))
    raise AssertionError("the drive is too short")


def imports() -> dict[str, Any]:
    """CPU seconds of the import over a bare interpreter's with NumPy, and whether heavy packages stay out."""
    heavy = ("torch", "numba", "shapely", "hydra")
    program = (
        "import sys, time, numpy; clock = time.process_time(); import learnfilter.runtime; "
        f"print(time.process_time() - clock, [n for n in {heavy} if n in sys.modules])"
    )
    runs = [
        subprocess.run([sys.executable, "-c", program], check=True, capture_output=True, text=True).stdout
        for _ in range(5)
    ]
    seconds = sorted(float(run.split()[0]) for run in runs)
    whole = (
        "import time; clock = time.process_time(); import learnfilter.runtime; "
        "print(time.process_time() - clock)"
    )
    all_of_it = sorted(
        float(subprocess.run([sys.executable, "-c", whole], check=True, capture_output=True).stdout)
        for _ in range(5)
    )
    assert all(run.split(maxsplit=1)[1].strip() == "[]" for run in runs), runs
    return {"import_seconds": all_of_it[2], "import_seconds_beside_numpy": seconds[2]}


if __name__ == "__main__":
    main()

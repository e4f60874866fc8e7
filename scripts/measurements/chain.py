"""What the whole chain is worth and costs: one JSON object (scripts/measure chain).

Three demos (training seeds 0, 1, 2; every seed has sites of its own) give the gains on unseen sites, the
minutes and the memory; each demo's models are then judged on a real plan, if the open data folder is
here.  Intervals are 95 %, paired by drive, bootstrap over the sites of all seeds together.  Progress goes
to standard error; runs are kept in runs/measure-chain and taken up again.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

from _runs import SEEDS, say, spread

from learnfilter.app.threads import wait_passively

wait_passively()

from learnfilter.ablation.statistics import Interval, bootstrap, paired_bootstrap  # noqa: E402
from learnfilter.ablation.study import Row, read_rows  # noqa: E402
from learnfilter.ablation.verdict import column, drives_of  # noqa: E402
from learnfilter.core.seeds import stream  # noqa: E402

RUNS = Path("runs/measure-chain")
REAL_PLAN = Path("../shared/data/plans/westport-house-floor-3.geojson")
# A training of seconds in which every stage still writes several checkpoints.
SHORT = (
    "train.sites=4", "train.stills=32", "train.validation_sites=2", "train.rows=16",
    "train.validation_steps=3",
    "train.strips=12", "train.decoys=24", "train.lengths=[3]", "site.width_m=8", "site.depth_m=8",
    *(f"train.{stage}.{key}" for stage in ("tuning", "matching", "filtering")
      for key in ("iterations=9", "validate_every=3", "patience=9")),
)  # fmt: skip


def main() -> None:
    """Measure everything and print it."""
    demos = [demo(seed) for seed in SEEDS]
    figures: dict[str, Any] = {
        "demo_minutes": spread([d["minutes"] for d in demos]),
        "peak_memory_gb": spread([d["gigabytes"] for d in demos]),
        **gains([d["folder"] for d in demos]),
        **untrained(demos[0]["folder"]),
        **real_plan([d["folder"] for d in demos]),
        "resume_identical": resume_identical(),
        "rays_vs_embreex": rays(),
    }
    print(json.dumps(figures, indent=2))


def command(*words: str) -> list[str]:
    return [sys.executable, "-m", "learnfilter.app.main", *words]


def demo(seed: int) -> dict[str, Any]:
    """Run one demo as a process of its own; its cost is read from the operating system."""
    folder, cost = RUNS / "demo" / f"seed-{seed}", RUNS / f"cost-{seed}.json"
    if not cost.exists():
        say(f"demo, seed {seed}")
        start = time.monotonic()
        child = subprocess.Popen(
            command("demo", f"seed={seed}", f"runs={RUNS}", f"name=seed-{seed}"), stdout=sys.stderr
        )
        _, status, usage = os.wait4(child.pid, 0)
        if status != 0:
            raise SystemExit(f"the demo with seed {seed} failed")
        minutes = (time.monotonic() - start) / 60
        cost.write_text(json.dumps({"minutes": minutes, "gigabytes": usage.ru_maxrss * 1024 / 1e9}))
    return {"folder": folder, **json.loads(cost.read_text())}


def tagged(folders: list[Path]) -> list[Row]:
    """Rows of all runs, sites and drives named by run."""
    return [
        {**row, **{key: f"{folder.name}/{row[key]}" for key in ("unit", "drive")}}
        for folder in folders
        for row in read_rows(folder / "rows.jsonl")
    ]


def joined(folders: list[Path]) -> tuple[list[Row], list[Row]]:
    """Rows of the matcher, and of each run's best analytic model under one name."""
    learned, analytic = [], []
    for folder in folders:
        best = json.loads((folder / "summary.json").read_text())["results"]["best_analytic"]
        rows = tagged([folder])
        learned += [{**r, "contender": "learned"} for r in rows if r["contender"] == "matcher"]
        analytic += [{**r, "contender": "analytic"} for r in rows if r["contender"] == best]
    return learned, analytic


def gains(folders: list[Path]) -> dict[str, Any]:
    """Learned minus analytic on unseen sites of all seeds.

    The opponent is each seed's best on validation drives; since another may be better on these sites,
    the smallest gain over any one analytic model is given beside.
    """
    learned, analytic = joined(folders)
    order, sites = drives_of(learned)
    every = tagged(folders)

    def gain(rows: list[Row], opponent: str, key: str) -> dict[str, Any]:
        sign = -1.0 if key.startswith("nll") else 1.0
        a, b = column(learned, "learned", key, order), column(rows, opponent, key, order)
        return paired_bootstrap(sign * a, sign * b, sites, rng=stream(0, "chain", key)).as_dict()

    def smallest(key: str) -> dict[str, Any]:
        opponents = {r["contender"] for r in every if not r["contender"].startswith("matcher")}
        return min(({"over": o, **gain(every, o, key)} for o in sorted(opponents)), key=lambda g: g["value"])

    return {
        "located_gain_4": gain(analytic, "analytic", "located_4"),
        "nll_gain_4": gain(analytic, "analytic", "nll_4"),
        "located_gain_32": gain(analytic, "analytic", "located_32"),
        "smallest_located_gain_4": smallest("located_4"),
        "smallest_nll_gain_4": smallest("nll_4"),
    }


def untrained(folder: Path) -> dict[str, Any]:
    """How far an untrained matcher is from the blend it is born from."""
    from dataclasses import replace

    from learnfilter.app.lattices import build_lattices
    from learnfilter.app.models import settings_of, stored
    from learnfilter.app.training import training_material, untrained_gap

    settings = settings_of(folder)
    settings = replace(settings, site=replace(settings.site, file=None))
    say("untrained gap")
    models = stored(folder, settings)
    train, held_out = training_material(settings).grounds(build_lattices(settings), stills=False)
    gap = untrained_gap(settings, models, train, held_out)
    return {"untrained_gap_nats": gap}


def real_plan(folders: list[Path]) -> dict[str, Any]:
    """The models of every demo on a real plan with simulated drives; drives are the units."""
    if not REAL_PLAN.exists():
        say(f"{REAL_PLAN} is not here: real_plan_* left out")
        return {}
    runs = []
    for seed, folder in zip(SEEDS, folders, strict=True):
        say(f"real plan, models of seed {seed}")
        words = (
            "ablate", f"model={folder}", f"runs={RUNS}", f"name=seed-{seed}", f"seed={seed}", "site=file",
            f"site.file={REAL_PLAN}", "study.rows=16", "study.hide_colour=false", "study.mark=8",
        )  # fmt: skip
        subprocess.run(command(*words), check=True, stdout=sys.stderr)
        runs.append(RUNS / "ablate" / f"seed-{seed}")
    learned, analytic = joined(runs)
    order, drives = drives_of(learned)
    a, b = (
        column(rows, name, "located_8", order)
        for rows, name in ((learned, "learned"), (analytic, "analytic"))
    )
    located: Interval = bootstrap(a, drives, rng=stream(0, "chain", "real"))
    gain = paired_bootstrap(a, b, drives, rng=stream(0, "chain", "real gain"))
    return {"real_plan_located": located.as_dict(), "real_plan_minus_analytic": gain.as_dict()}


def resume_identical() -> bool:
    """Whether trainings killed once in every stage end with the weights of an undisturbed one."""
    with tempfile.TemporaryDirectory() as scratch:
        words = ("train", f"runs={scratch}", *SHORT)
        say("resume: undisturbed run")
        subprocess.run(command(*words, "name=whole"), check=True, stdout=sys.stderr)
        killed = Path(scratch) / "train" / "killed"
        marks = ("tuning-beam", "matching", "filtering")
        for mark in marks:
            say(f"resume: kill in {mark}")
            child = subprocess.Popen(command(*words, "name=killed"), stdout=sys.stderr)
            while not (killed / "checkpoints" / f"{mark}.safetensors").exists():
                if child.poll() is not None:
                    raise SystemExit(f"the run ended before a checkpoint of {mark}")
                time.sleep(0.005)
            child.send_signal(signal.SIGKILL)
            child.wait()
            if (killed / "summary.json").exists():
                raise SystemExit(f"the kill in {mark} came too late")
        say("resume: to the end")
        subprocess.run(command(*words, "name=killed"), check=True, stdout=sys.stderr)
        files = sorted((Path(scratch) / "train" / "whole" / "models").glob("*.safetensors"))
        return bool(files) and all(
            file.read_bytes() == (killed / "models" / file.name).read_bytes() for file in files
        )


def rays() -> dict[str, float]:
    """Rate against an industrial ray tracer, from the measurement beside this one."""
    sys.path.insert(0, str(Path(__file__).parent))
    from rays import measure

    say("rays")
    return measure()["rays_vs_embreex"]


if __name__ == "__main__":
    main()

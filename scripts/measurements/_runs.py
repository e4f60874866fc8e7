"""Trainings that several measurements stand on, and how they say what they do."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from collections.abc import Sequence
from pathlib import Path

import numpy as np

SEEDS = (0, 1, 2)
RUNS = Path("runs/measure-evidence")


def say(text: str) -> None:
    """Progress, to standard error."""
    print(f"measure: {text}", file=sys.stderr, flush=True)


def command(*words: str) -> None:
    """Run learnfilter; its own progress goes to standard error."""
    words = (*words, f"runs={RUNS}")
    subprocess.run([sys.executable, "-m", "learnfilter.app.main", *words], check=True, stdout=sys.stderr)


def train(name: str, seed: int, *words: str) -> tuple[Path, float]:
    """A training run and its minutes; kept, with its minutes, once it is complete."""
    folder = RUNS / "train" / f"{name}-{seed}"
    cost = RUNS / f"minutes-{name}-{seed}.json"
    if not cost.exists():
        say(f"train {name}-{seed}")
        clock = time.monotonic()
        command("train", f"name={name}-{seed}", f"seed={seed}", *words)
        cost.write_text(json.dumps((time.monotonic() - clock) / 60))
    return folder, json.loads(cost.read_text())


def spread(values: Sequence[float]) -> dict[str, float]:
    """Mean with the least and greatest of a few runs."""
    return {"value": float(np.mean(values)), "low": min(values), "high": max(values), "n": len(values)}

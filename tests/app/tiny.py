"""Settings of a training of seconds, fresh interpreters, and folders made once for all workers."""

import fcntl
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

TOP = Path(__file__).resolve().parents[2]
OFFICE = TOP / "toy_worlds" / "lindqvist_office.geojson"
# A training in which every stage still writes several checkpoints.
TRAINING = (
    "threads=1", "grid.headings=16", "grid.bearings_per_heading=4", "site.width_m=8", "site.depth_m=8",
    "train.sites=2", "train.drives=1", "train.rows=12", "train.stills=16", "train.validation_sites=1",
    "train.validation_steps=2", "train.strips=6", "train.decoys=12", "train.lengths=[3]",
    "train.search=[{column_step: 2}]",
    *(f"train.{stage}.{key}" for stage in ("tuning", "matching", "filtering")
      for key in ("iterations=6", "validate_every=2", "patience=9")),
)  # fmt: skip
STUDY = ("study.sites=2", "study.drives=1", "study.rows=12")
# Waiting threads must not spin while tests run side by side.
ENVIRONMENT = {**os.environ, "PYTHONPATH": str(TOP), "OMP_WAIT_POLICY": "PASSIVE"}


def python(*words: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    """A fresh interpreter that finds the package."""
    return subprocess.run([sys.executable, *words], cwd=cwd, env=ENVIRONMENT, capture_output=True, text=True)


def once(factory, name: str, make: Callable[[Path], None]) -> Path:
    """A folder filled by `make` in the first process that asks; the others wait for it."""
    base = factory.getbasetemp()
    base = base.parent if "PYTEST_XDIST_WORKER" in os.environ else base
    folder, done = base / name, base / f"{name}.done"
    with (base / f"{name}.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not done.exists():
            folder.mkdir()
            make(folder)
            done.touch()
    return folder

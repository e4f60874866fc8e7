"""Run a bundle over a recorded drive and see where the robot found itself.

Every strip goes through the NumPy runtime, exactly as on the robot. The run's folder gets estimates.parquet
(pose, covariance, mass, entropy and state a row), replay.png and summary.json. With site.file=PATH the trail
is drawn on your plan, without it on the surfaces that the bundle knows.

Example:
  learnfilter replay bundle=runs/export/office/bundle drive=tuesday.parquet site.file=office.geojson
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan
from learnfilter.app.replaying import draw, replay_bundle, seen_surfaces
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import ReplayConfig
from learnfilter.drives.tables import iter_rows
from learnfilter.runtime import load_bundle


def run(settings: ReplayConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    bundle, drive = Path(settings.bundle), Path(settings.drive)
    loaded = load_bundle(bundle)
    plan = build_plan(settings.site) if settings.site.file else seen_surfaces(loaded.site, loaded.site.grid)
    folder = open_run("replay", settings.name or drive.stem, settings, replace=True)
    batches = iter_rows(drive, loaded.strip, depth_kind=settings.depth_kind)
    replayed = replay_bundle(loaded, batches, folder.path / "estimates.parquet")
    draw(replayed, plan, folder.path / "replay.png", f"{drive.stem} through {bundle}")
    summary = replayed.summary()
    at = summary["locked_at_row"]
    print(f"{summary['rows']} strips: " + ("never locked" if at is None else f"locked at strip {at + 1}"))
    if summary["located_share"] is not None:
        print(f"within 0.5 m and 15 degrees of the reference in {summary['located_share']:.0%} of rows")
    print(f"written: {folder.path} (estimates.parquet, replay.png)")
    return folder.finish(summary)

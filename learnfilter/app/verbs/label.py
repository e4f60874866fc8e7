"""Give a recorded drive its reference poses, from all of its strips at once.

The filter runs over the drive forwards and backwards, so that each pose rests on what came after as well.
Rows whose smoothed belief leaves doubt keep none. Say where the robot was at some rows if you know it:
known='{0: [1.2, 3.4, 90]}' (x and y in metres, heading in degrees). The run's folder gets the drive table
with reference poses, labels.png and summary.json.

Example:
  learnfilter label model=runs/train/cart site.file=office.geojson drive=tuesday.parquet
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from learnfilter.app.build import build_plan, build_strip
from learnfilter.app.models import chosen, settings_of
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import LabelConfig
from learnfilter.drives.metrics import located
from learnfilter.drives.tables import read_drive, write_drive
from learnfilter.filtering.smooth import smooth
from learnfilter.report import draw_plan


def run(settings: LabelConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    made_with = settings_of(Path(settings.model))
    model = chosen(Path(settings.model), settings.contender, made_with)
    lattices = model.lattices
    plan = build_plan(settings.site)
    drive = read_drive(Path(settings.drive), build_strip(made_with.strip), depth_kind=settings.depth_kind)
    folder = open_run("label", settings.name or Path(settings.drive).stem, settings, replace=True)
    known = {row: np.array([x, y, np.radians(deg)]) for row, (x, y, deg) in (settings.known or {}).items()}
    site = lattices.render(plan, Path(settings.runs) / "cache")
    labels = smooth(
        drive, site, model.model, model.motion, after_m=lattices.after_m,
        after_rad=lattices.after_rad, floor=model.facts["floor"], known=known,
    )  # fmt: skip
    table = folder.path / Path(settings.drive).name
    write_drive(replace(drive, reference=labels.reference), table)
    draw_plan(plan, folder.path / "labels.png", trail=labels.reference, title=f"{drive.name}: labelled poses")
    sure = np.isfinite(labels.reference).all(axis=1)
    facts: dict[str, Any] = {"rows": len(drive), "labelled_rows": int(sure.sum())}
    print(f"{facts['labelled_rows']} of {len(drive)} rows labelled")
    if drive.reference is not None:
        right = located(labels.reference, drive.reference)
        right = right[np.isfinite(right)]
        facts["located_share"] = float(right.mean()) if len(right) else None
        if len(right):
            print(f"within 0.5 m and 15 degrees of the table's own reference in {right.mean():.0%} of those")
    print(f"written: {table}, {folder.path / 'labels.png'}")
    return folder.finish(facts)

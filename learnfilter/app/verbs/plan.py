"""Read a floor plan, check it, draw it, and write it in this tool's own form.

Every fault is named with its place, so that you can mend the file before the filter trusts it. Look at
the picture: doors, windows and what the plan knows of colours are drawn as the filter will use them.
The run's folder gets plan.png, plan.geojson (metres; edit it and read it again) and summary.json.
Exit code 2 where a finding makes the plan unusable.

Example:
  learnfilter plan site.file=toy_worlds/lindqvist_office.geojson
"""

from __future__ import annotations

from collections import Counter
from dataclasses import asdict
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import PlanConfig
from learnfilter.core.errors import ConfigError, PlanError
from learnfilter.plan import check_plan, write_plan
from learnfilter.report import draw_plan


def run(settings: PlanConfig) -> dict[str, Any]:
    """Do the verb; returns the summary.

    Raises:
        PlanError: the plan cannot be read, or a finding makes it unusable (picture and summary are written).
    """
    plan = build_plan(settings.site)
    findings = check_plan(plan, robot_radius_m=settings.robot_radius_m)
    source = Path(settings.site.file or "")
    folder = open_run("plan", settings.name or source.stem, settings, replace=True)
    out = Path(settings.out) if settings.out else folder.path / "plan.geojson"
    if out.exists() and out.samefile(source):
        raise ConfigError("this would overwrite the plan that is read", place="out", got=out)

    write_plan(plan, out)
    draw_plan(plan, folder.path / "plan.png", findings=findings)
    left, bottom, right, top = plan.bounds
    print(f"{plan.name}: {len(plan.segments)} surfaces, {right - left:.1f} x {top - bottom:.1f} m")
    for number, finding in enumerate(findings, 1):
        print(f"{number:3d} {finding.severity}: {finding.message} {finding.advice}".rstrip())
    print(f"written: {out}, {folder.path / 'plan.png'}")
    counts = Counter(finding.severity for finding in findings)
    summary = folder.finish(
        {
            "surfaces": len(plan.segments),
            "width_m": right - left,
            "depth_m": top - bottom,
            "has_finishes": plan.has_finishes,
            "counts": dict(counts),
            "findings": [asdict(finding) for finding in findings],
        }
    )
    if counts["error"]:
        raise PlanError(
            f"the plan cannot be used before {counts['error']} of the above is mended", file=source
        )
    return summary

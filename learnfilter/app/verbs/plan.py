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
from collections.abc import Sequence
from dataclasses import asdict
from itertools import groupby
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import PlanConfig
from learnfilter.core.errors import ConfigError, PlanError
from learnfilter.plan import Finding, check_plan, write_plan
from learnfilter.report import draw_plan

# More of a kind hide the other kinds, in the terminal and on the picture.
MOST_OF_A_KIND = 8


def run(settings: PlanConfig) -> dict[str, Any]:
    """Do the verb; returns the summary.

    Raises:
        PlanError: the plan cannot be read, or a finding makes it unusable (picture and summary are written).
    """
    plan = build_plan(settings.site)
    findings = check_plan(plan, robot_radius_m=settings.robot_radius_m)
    shown = _shortened(findings)
    source = Path(settings.site.file or "")
    folder = open_run("plan", settings.name or source.stem, settings, replace=True)
    out = Path(settings.out) if settings.out else folder.path / "plan.geojson"
    if out.exists() and out.samefile(source):
        raise ConfigError("this would overwrite the plan that is read", place="out", got=out)

    write_plan(plan, out)
    draw_plan(plan, folder.path / "plan.png", findings=shown)
    left, bottom, right, top = plan.bounds
    print(f"{plan.name}: {len(plan.segments)} surfaces, {right - left:.1f} x {top - bottom:.1f} m")
    advised = ""
    for number, finding in enumerate(shown, 1):
        advice = finding.advice if finding.advice != advised else ""
        advised = finding.advice
        print(f"{number:3d} {finding.severity}: {finding.message} {advice}".rstrip())
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


def _shortened(findings: Sequence[Finding]) -> list[Finding]:
    """The first few findings of each kind, and one that counts the others of it."""
    shown: list[Finding] = []
    for what, kind in groupby(findings, lambda finding: finding.what):
        alike = list(kind)
        shown += alike[:MOST_OF_A_KIND]
        if len(alike) > MOST_OF_A_KIND:
            message = f"{len(alike) - MOST_OF_A_KIND} more like the one above; summary.json has them all."
            shown.append(Finding(alike[0].severity, what, message, None, alike[0].advice))
    return shown

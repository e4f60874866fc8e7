"""Make the folder that goes to the robot: weights, your site, and numbers to check them by.

The bundle holds manifest.json, weights.safetensors, site.safetensors, vectors.npz (inputs and expected
outputs of whole filter steps), and model and step once more as observe.onnx and step.onnx. The robot reads
it with NumPy and safetensors alone: see `learnfilter.runtime`. Any model of a training run can go, the
analytic ones too; precision=fp16 or int8 makes weights and rings smaller and less exact. How surprising a
strip usually is on this site is measured on simulated drives, or on recorded ones on which the plan was
true: drives=[a.parquet,b.parquet]. A policy that the run has goes along and proposes where to go next.
When the plan changes, export again; nothing is trained anew.

Example:
  learnfilter export model=runs/train/cart site.file=toy_worlds/lindqvist_office.geojson
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan, build_strip
from learnfilter.app.exporting import export_bundle, recorded
from learnfilter.app.models import chosen, settings_of
from learnfilter.app.movers import stored_policy
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import ExportConfig
from learnfilter.core.errors import ConfigError
from learnfilter.export.check import compare


def run(settings: ExportConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    source = Path(settings.model)
    made_with = replace(settings_of(source), runs=settings.runs)  # the cache is ours, not the trainer's
    model = chosen(source, settings.contender, made_with)
    plan = build_plan(settings.site)
    figures = _figures(settings.ablation)
    folder = open_run("export", settings.name or Path(settings.site.file or "").stem, settings, replace=True)
    out = Path(settings.out) if settings.out else folder.path / "bundle"
    usual = recorded(settings.drives, build_strip(made_with.strip))
    policy = stored_policy(source)
    sizes = export_bundle(
        made_with, model, plan, out, figures, precision=settings.precision, usual=usual, policy=policy
    )
    sizes["runtime_tv"] = compare(out)
    size = f"{sizes['bytes'] / 1e6:.1f} MB, {sizes['weights']:,} weights, {sizes['poses']:,} poses"
    print(f"written: {out} ({size})")
    print(f"the NumPy runtime reproduces its vectors to a total variation of {sizes['runtime_tv']:.1e}")
    return folder.finish(sizes)


def _figures(ablation: str | None) -> dict[str, Any] | None:
    """Figures of an ablation run."""
    if ablation is None:
        return None
    path = Path(ablation) / "summary.json"
    try:
        return dict(json.loads(path.read_text(encoding="utf-8"))["results"])
    except (OSError, ValueError, KeyError) as error:
        raise ConfigError("not a finished ablation", file=path, place="ablation", got=error) from error

"""Make a bundle of one model for one site."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_strip
from learnfilter.app.grounds import drives_on
from learnfilter.app.models import Stored
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.export import Filter, Provenance, write_bundle
from learnfilter.plan import FloorPlan
from learnfilter.runtime.bundle import Weighing
from learnfilter.sim.conditions import Conditions

# Rows of the drive that test vectors are made from: enough that 50 strips are weighed on any site.
VECTOR_ROWS = 90


def filter_for(made_with: TrainConfig, model: Stored, plan: FloorPlan) -> Filter:
    """A model on a plan, with the sensor and lattice it was trained for."""
    lattices = model.lattices
    weighing = Weighing(lattices.after_m, lattices.after_rad, model.facts["floor"])
    site = lattices.render(plan, Path(made_with.runs) / "cache")
    return Filter(model.model, model.motion, site, build_strip(made_with.strip), weighing)


def vector_drive(plan: FloorPlan, strip: Strip, radius_m: float, seed: int, rows: int = VECTOR_ROWS) -> Drive:
    """A simulated drive for the bundle's test vectors."""
    return drives_on(plan, strip, Conditions(), 1, rows, seed, radius_m).drives[0]


def export_bundle(
    made_with: TrainConfig,
    model: Stored,
    plan: FloorPlan,
    folder: Path,
    figures: dict[str, Any] | None = None,
    cautions: Sequence[str] = (),
) -> dict[str, Any]:
    """Write the bundle; returns its sizes.

    Args:
        made_with: settings of the training run.
        model: which of its models.
        plan: of the site.
        folder: where.
        figures: of an ablation, which go along.
        cautions: beyond the safety notice.
    """
    chosen = filter_for(made_with, model, plan)
    drive = vector_drive(plan, chosen.strip, made_with.grid.robot_radius_m, made_with.seed)
    stages = model.facts["stages"]
    provenance = Provenance(
        plan.content_hash(), model.facts["config"], [model.facts["seed"]], {"stages": stages}
    )
    return write_bundle(folder, chosen, drive, provenance, figures, cautions)

"""Make a bundle of one model for one site."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_strip
from learnfilter.app.grounds import drives_on
from learnfilter.app.models import Stored
from learnfilter.app.movers import StoredPolicy
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import read_drive
from learnfilter.export import Filter, Provenance, write_bundle
from learnfilter.plan import FloorPlan
from learnfilter.runtime.bundle import Weighing
from learnfilter.sim.conditions import Conditions

# Rows of the drives that test vectors are made from: enough that 50 strips are weighed on any site.
VECTOR_ROWS = 90
# Drives that the watch is calibrated by, and rows of each: 2,000 strips, and seconds on a small site.
USUAL_DRIVES, USUAL_ROWS = 60, 34


def filter_for(made_with: TrainConfig, model: Stored, plan: FloorPlan, cache: Path | None = None) -> Filter:
    """A model on a plan, with the sensor and lattice it was trained for; `cache` keeps renderings."""
    lattices = model.lattices
    weighing = Weighing(lattices.after_m, lattices.after_rad, model.facts["floor"])
    site = lattices.render(plan, cache)
    return Filter(model.model, model.motion, site, build_strip(made_with.strip), weighing)


def export_bundle(
    made_with: TrainConfig,
    model: Stored,
    plan: FloorPlan,
    folder: Path,
    figures: dict[str, Any] | None = None,
    cautions: Sequence[str] = (),
    precision: str = "fp32",
    usual: Sequence[Drive] | None = None,
    policy: StoredPolicy | None = None,
) -> dict[str, Any]:
    """Write the bundle; returns its sizes.

    Args:
        made_with: settings of the training run.
        model: which of its models.
        plan: of the site.
        folder: where.
        figures: results of an ablation, which go along with their verdict.
        cautions: beyond the safety notice.
        precision: of weights and rings, one of `runtime.bundle.PRECISIONS`.
        usual: drives on the site to calibrate the watch by; None for simulated ones.
        policy: that goes along, if any.
    """
    chosen = filter_for(made_with, model, plan, Path(made_with.runs) / "cache")

    def simulated(drives: int, rows: int, seed: int) -> tuple[Drive, ...]:
        radius_m = made_with.grid.robot_radius_m
        return drives_on(plan, chosen.strip, Conditions(), drives, rows, seed, radius_m).drives

    provenance = Provenance(
        plan.content_hash(),
        model.facts["config"],
        [model.facts["seed"]],
        {"stages": model.facts["stages"]},
        trained_on(made_with),
    )
    results = dict(figures or {})
    verdict = results.pop("verdict", None)
    return write_bundle(
        folder,
        chosen,
        simulated(2, VECTOR_ROWS, made_with.seed),
        provenance,
        results,
        cautions,
        precision=precision,
        verdict=verdict,
        usual=simulated(USUAL_DRIVES, USUAL_ROWS, made_with.seed + 1) if usual is None else usual,
        mover=None if policy is None else policy.shipped(),
    )


def recorded(paths: Sequence[str], strip: Strip) -> list[Drive] | None:
    """Recorded drives to calibrate the watch by, each cut to starts of USUAL_ROWS rows; None for no paths."""
    if not paths:
        return None
    drives = [read_drive(Path(path), strip) for path in paths]
    return [
        drive.part(begin, begin + USUAL_ROWS)
        for drive in drives
        for begin in range(0, len(drive) - USUAL_ROWS + 1, USUAL_ROWS)
    ]


def trained_on(made_with: TrainConfig) -> dict[str, Any]:
    """What a training run learned from, for the manifest: `sites`, `drives` and their `source`."""
    if made_with.drives:
        names = [Path(drive).name for drive in made_with.drives]
        return {"sites": 1, "drives": len(names), "source": names}
    recipe = made_with.train
    return {
        "sites": recipe.sites, "drives": recipe.sites * recipe.drives, "source": list(made_with.site.families)
    }  # fmt: skip

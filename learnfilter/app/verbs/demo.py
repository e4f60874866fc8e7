"""The whole chain in one go: sites, training, ablation, bundle, replay, report.

Invents sites, trains a matcher on some and tunes the analytic models, compares them on sites none has seen,
exports a bundle for one of those, replays a drive through the NumPy runtime, and prints the way to the
report. With site.file=PATH the comparison, the bundle and the replay are made on your own plan with
simulated drives; training stays in invented sites. A killed run is taken up again by the same command.

Example:
  learnfilter demo site.file=toy_worlds/lindqvist_office.geojson
"""

from __future__ import annotations

import time
from dataclasses import replace
from pathlib import Path
from typing import Any

from learnfilter.app.build import FILE_OPTIONS, build_plan, check_invented
from learnfilter.app.exporting import export_bundle
from learnfilter.app.grounds import Place
from learnfilter.app.judging import Judgement, compared, judge_models, watch_first
from learnfilter.app.lattices import check_search
from learnfilter.app.models import LEARNED, Stored
from learnfilter.app.pages import (
    DEPTH_ONLY,
    SIMULATED,
    condition_table,
    forests,
    provenance,
    score_charts,
    score_tables,
    settings_text,
    size_table,
    table_lines,
    training_charts,
    trust_table,
)
from learnfilter.app.practising import check_practice, train_mover
from learnfilter.app.replay_page import stories, timeline, trail_map
from learnfilter.app.replaying import Replayed, replay_bundle
from learnfilter.app.runs import RunFolder, open_run
from learnfilter.app.studying import Subject, study_subject
from learnfilter.app.training import train_models
from learnfilter.app.verb_settings import DemoConfig, TrainConfig
from learnfilter.drives.tables import iter_rows, write_drive
from learnfilter.export.check import compare
from learnfilter.plan import FloorPlan, check_plan, write_plan
from learnfilter.report import Column, RunPage, SiteMap, Table, TrailMap, draw_plan, draw_replay, write_page
from learnfilter.runtime import load_bundle


def run(settings: DemoConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    check_invented(settings.site)
    check_search(settings)
    check_practice(settings)
    site = settings.site
    if site.file:
        build_plan(site)  # a bad plan is refused before hours are spent
    name = Path(site.file).stem if site.file else "default"
    folder = open_run("demo", settings.name or name, settings)
    clock = time.monotonic()
    made_with = _training_part(settings)
    models = train_models(made_with, folder.path)
    policy = train_mover(made_with, models, folder.path) if settings.mover.practice else None
    trained_s = time.monotonic() - clock
    subject = study_subject(
        made_with, site, {"as configured": settings.condition}, settings.study, settings.seed
    )
    found = judge_models(
        compared(models, settings.study.models), subject, settings.study, folder.path, settings.seed
    )
    first = next(place for _, place in subject.places())
    shipped = models[LEARNED] if found.verdict.ship == "learned" else models[found.analytic]
    bundle = export_bundle(
        made_with, shipped, first.plan, folder.path / "bundle", found.summary(), policy=policy
    )
    bundle["runtime_tv"] = compare(folder.path / "bundle")
    replayed = _replay(folder, first)
    write_page(
        _page(settings, folder, models, found, subject, first.plan, bundle, replayed),
        folder.path / "report.html",
    )
    results = {
        **found.summary(),
        "validation_nats": {n: m.facts["validation"] for n, m in models.items()},
        "parameters": models[LEARNED].facts["parameters"],
        "training_seconds": trained_s,
        "bundle": {**bundle, "folder": "bundle"},
        "replay": replayed.summary(),
    }
    summary = folder.finish(results)
    print("\n".join(table_lines(found)))
    print(f"bundle ({shipped.name}): {folder.path / 'bundle'}")
    print(f"report: {(folder.path / 'report.html').resolve().as_uri()}")
    return summary


def _training_part(settings: DemoConfig) -> TrainConfig:
    """The settings a training run would have: invented sites, whatever is judged on."""
    fields = {key: getattr(settings, key) for key in TrainConfig.__dataclass_fields__}
    of_file: dict[str, Any] = dict.fromkeys(("file", *FILE_OPTIONS))
    return TrainConfig(**{**fields, "site": replace(settings.site, **of_file)})


def _replay(folder: RunFolder, place: Place) -> Replayed:
    """Write the first drive as a table and run the bundle over it, as the robot would."""
    plan, drive = place.plan, place.drives[0]
    write_plan(plan, folder.path / "site.geojson")
    draw_plan(plan, folder.path / "site.png", findings=check_plan(plan))
    table = folder.path / "drive.parquet"
    write_drive(drive, table)
    loaded = load_bundle(folder.path / "bundle")
    replayed = replay_bundle(loaded, iter_rows(table, loaded.strip), folder.path / "estimates.parquet")
    draw_replay(_trail_map(replayed, plan), folder.path / "replay.png")
    return replayed


def _trail_map(replayed: Replayed, plan: FloorPlan) -> TrailMap:
    return trail_map({"bundle": replayed}, plan, f"{plan.name}: the bundle over a recorded drive")


def _page(
    settings: DemoConfig,
    folder: RunFolder,
    models: dict[str, Stored],
    found: Judgement,
    subject: Subject,
    plan: FloorPlan,
    bundle: dict[str, Any],
    replayed: Replayed,
) -> RunPage:
    shown = [models[found.analytic], models[LEARNED]]
    episodes = watch_first(shown, subject, 3) if subject.count > 1 else watch_first(shown, subject, 1, 2)
    at = replayed.summary()["locked_at_row"]
    handed = Table(
        "What goes to the robot",
        (Column("bundle"), Column("value", ",d")),
        (
            ("bytes in all", bundle["bytes"]),
            ("bytes of weights", bundle["weights_bytes"]),
            ("live cells", bundle["cells"]),
            ("poses", bundle["poses"]),
            ("strips of the replayed drive", len(replayed.rows)),
            ("row at which it locked", at),
            ("times it was lost", replayed.lost),
        ),
        f"The NumPy runtime reproduces its vectors to a total variation of {bundle['runtime_tv']:.1e}.",
    )
    return RunPage(
        title=folder.path.name,
        verb="demo",
        headline=found.verdict.sentence,
        confidence=found.verdict.confidence,
        job=f"Train in invented sites, then judge on {subject.title}.",
        episodes=episodes,
        trail_maps=(_trail_map(replayed, plan),),
        timelines=(timeline({"bundle": replayed}),),
        stories=stories({"bundle": replayed}),
        maps=(SiteMap(f"Plan of {plan.name}", plan, check_plan(plan)),),
        tables=(*score_tables(found), *condition_table(found), trust_table(found)),
        forests=forests(found),
        charts=(*score_charts(found), *training_charts(models)),
        facts=(size_table(models, found), handed),
        cautions=((SIMULATED,) if plan.has_finishes else (DEPTH_ONLY, SIMULATED)),
        provenance=provenance(
            settings, {"config": models[LEARNED].facts["config"], "plan": plan.content_hash()}
        ),
        settings=settings_text(settings),
    )

"""Prove whether the learned model beats the analytic ones, where it will be used.

Every model of a training run filters the same drives from an unknown start. You get the located share and
the nats of the true pose after 1 to 32 strips, paired differences with 95 % intervals over sites, whether
each model's own confidence can be believed, and one sentence: ship the learned model, ship the analytic
one, or cannot tell. Name the conditions your robot will meet: conditions=[as-trained,dim-light+crowd],
or conditions=[all]; each is a file in configs/condition, or in condition/ of your --config-dir.
On your own plan: site=file site.file=PATH, with simulated drives or recorded ones (drives=[a.parquet]).
With movers=[wander,least-entropy,policy] robots choose their way instead, each mover from the same starts:
you get strips and metres until they trust their pose, the share located at fixed budgets, contacts and
the time of a decision; name the look-alike sites you fear: site.families=[doors,racks].

Example:
  learnfilter ablate model=runs/train/cart conditions=[as-trained,dim-light]
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from learnfilter.ablation.motion_study import mover_scores
from learnfilter.app.judging import compared, judge_models, watch_first
from learnfilter.app.models import LEARNED, settings_of, stored
from learnfilter.app.mover_pages import (
    mover_forests,
    mover_headline,
    mover_lines,
    mover_summary,
    mover_table,
)
from learnfilter.app.movers import build_movers
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
    trust_table,
)
from learnfilter.app.runs import open_run
from learnfilter.app.steering import MotionStudy, check_steering, steered
from learnfilter.app.studying import study_subject
from learnfilter.app.verb_settings import AblateConfig
from learnfilter.core.seeds import stream
from learnfilter.report import RunPage, write_page


def run(settings: AblateConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    return _compare_movers(settings) if settings.movers else _compare_models(settings)


def _compare_movers(settings: AblateConfig) -> dict[str, Any]:
    run_ = Path(settings.model)
    made_with = replace(settings_of(run_), runs=settings.runs)
    check_steering(settings)
    models = steered(stored(run_, made_with), settings.study.models)
    study = MotionStudy(settings, made_with, models, build_movers(settings.movers, run_, made_with))
    folder = open_run("ablate", settings.name or "default", settings)
    rows = study.run(folder.path)
    scores = mover_scores(rows, study.budgets, stream(settings.seed, "mover scores"))
    write_page(
        RunPage(
            title=folder.path.name,
            verb="ablate",
            headline=mover_headline(scores),
            confidence=f"{len(rows)} episodes; the table gives the spread.",
            job=f"Compare movers with models of {settings.model} on {study.title}.",
            tables=(mover_table(scores),),
            forests=mover_forests(scores),
            cautions=(SIMULATED,),
            provenance=provenance(settings, {name: m.facts["config"] for name, m in models.items()}),
            settings=settings_text(settings),
        ),
        folder.path / "report.html",
    )
    summary = folder.finish({"movers": mover_summary(scores), "episodes": len(rows)})
    print("\n".join(mover_lines(scores)))
    print(f"written: {folder.path} (report.html, rows.parquet)")
    return summary


def _compare_models(settings: AblateConfig) -> dict[str, Any]:
    made_with = replace(
        settings_of(Path(settings.model)), runs=settings.runs
    )  # the cache is ours, not the trainer's
    models = compared(stored(Path(settings.model), made_with), settings.study.models)
    subject = study_subject(
        made_with, settings.site, settings.conditions, settings.study, settings.seed, settings.drives,
        settings.blocks,
    )  # fmt: skip
    folder = open_run("ablate", settings.name or "default", settings)
    found = judge_models(models, subject, settings.study, folder.path, settings.seed)
    shown = [models[found.analytic], models[LEARNED]]
    episodes = watch_first(shown, subject, 2)
    plain = not episodes[0].plan.has_finishes
    cautions = ((DEPTH_ONLY,) if plain else ()) + (() if settings.drives else (SIMULATED,))
    write_page(
        RunPage(
            title=folder.path.name,
            verb="ablate",
            headline=found.verdict.sentence,
            confidence=found.verdict.confidence,
            job=f"Compare the models of {settings.model} on {subject.title}.",
            episodes=episodes,
            tables=(*score_tables(found), *condition_table(found), trust_table(found)),
            forests=forests(found),
            charts=score_charts(found),
            facts=(size_table(models, found),),
            cautions=cautions,
            provenance=provenance(settings, {"models": models[LEARNED].facts["config"]}),
            settings=settings_text(settings),
        ),
        folder.path / "report.html",
    )
    summary = folder.finish(found.summary())
    print("\n".join(table_lines(found)))
    print(f"written: {folder.path} (report.html, rows.parquet)")
    return summary

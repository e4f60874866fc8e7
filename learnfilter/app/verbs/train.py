"""Train an observation model for your sensor, and tune its analytic opponents.

Invents sites (`site.families`) under `condition`, drives on them with your `strip`, then: fits and tunes
the analytic models through the filter; trains the matcher, born from the best of them, on single strips
(`train.matching`) and through the filter (`train.filtering`). The weights that do best on held-out sites
are kept. Watch it: tensorboard --logdir runs/train. A killed run is taken up again by the same command
and ends with the same weights. With start=RUN, site.file=PLAN and drives=[...] the matcher of that run and
its best analytic model are tuned through the filter on your recorded drives (`train.recorded`); judge
them on rows they have not seen. With mover=policy a mover is trained too: on sites whose places look alike
(`mover.practice`) it tries which way to go to find itself soon; start=RUN mover=policy trains one for the
models of an earlier run.

Example:
  learnfilter train name=cart strip=depth-colour-90 seed=1
"""

from __future__ import annotations

from pathlib import Path
from typing import Any, NamedTuple

from learnfilter.app.build import check_invented
from learnfilter.app.lattices import check_search
from learnfilter.app.models import LEARNED, Stored
from learnfilter.app.mover_pages import mover_facts, practice_charts
from learnfilter.app.pages import provenance, settings_text, training_charts
from learnfilter.app.practising import check_practice, train_mover
from learnfilter.app.runs import RunFolder, open_run
from learnfilter.app.training import train_models
from learnfilter.app.tuning import (
    as_started,
    take_models_along,
    take_policy_along,
    tune_models,
    tuning_place,
)
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.report import Column, RunPage, Table, write_page


class Job(NamedTuple):
    """How a page speaks of a run: what was done, where nats were measured, and how far to trust them."""

    what: str
    where: str
    caution: str


TRAINED = Job(
    "Train an observation model and tune its analytic opponents.",
    "on held-out sites",
    "Validation chose the weights, so it flatters them; `learnfilter ablate` proves.",
)
TUNED = Job(
    "Tune the models of an earlier training on recorded drives.",
    "on the drives it was tuned on",
    "The same drives tuned the weights and chose them, so this proves nothing: `learnfilter ablate` on rows "
    "that were left out does.",
)

TAKEN_ALONG = Job(
    "Train a mover for the models of an earlier training.",
    "on the held-out sites of their training",
    "Validation chose the weights, so it flatters them; `learnfilter ablate movers=[wander,policy]` proves.",
)


def run(settings: TrainConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    settings, folder, models, job = _models(settings)
    policy = None
    if settings.mover.practice is not None:
        policy = train_mover(settings, models, folder.path)
    elif settings.start is not None:
        take_policy_along(settings, folder.path)
    validation = {name: model.facts["validation"] for name, model in models.items()}
    write_page(
        RunPage(
            title=folder.path.name,
            verb="train",
            headline=f"Nats of the true pose {job.where}: {LEARNED} {validation[LEARNED]:.2f}, "
            f"best analytic {min(v for n, v in validation.items() if n != LEARNED):.2f}.",
            confidence=job.caution,
            job=job.what,
            tables=(
                Table(
                    "Validation", (Column("model"), Column("nats", ".2f", "low")), tuple(validation.items())
                ),
            ),
            charts=(*training_charts(models), *practice_charts(policy)),
            provenance=provenance(settings, {"config": models[LEARNED].facts["config"]}),
            settings=settings_text(settings),
        ),
        folder.path / "report.html",
    )
    results = {"validation_nats": validation, "parameters": models[LEARNED].facts["parameters"]}
    for name, value in validation.items():
        print(f"{name:<16} {value:6.2f} nats {job.where}")
    if policy is not None:
        results["mover"] = mover_facts(policy)
        missed = policy.facts["validation"]
        print(f"{'policy':<16} {missed:6.2f} of what there is to find out missed or paid, on held-out sites")
    print(f"written: {Path(folder.path)} (models, report.html)")
    return folder.finish(results)


def _models(settings: TrainConfig) -> tuple[TrainConfig, RunFolder, dict[str, Stored], Job]:
    """The settings as they are used, the run's folder, its models, and how to speak of them."""
    name = settings.name or "default"
    if settings.start is None:
        check_invented(settings.site)
        check_search(settings)
        check_practice(settings)
        folder = open_run("train", name, settings)
        return settings, folder, train_models(settings, folder.path), TRAINED
    settings = as_started(settings, Path(settings.start))
    check_practice(settings)
    if not settings.drives:
        folder = open_run("train", name, settings)
        return settings, folder, take_models_along(settings, folder.path), TAKEN_ALONG
    place = tuning_place(settings)
    folder = open_run("train", name, settings)
    return settings, folder, tune_models(settings, place, folder.path), TUNED

"""Go on from a training run: tune its models on recorded drives, or take them along as they are."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

from learnfilter.ablation.verdict import choose_analytic
from learnfilter.app.board import Board
from learnfilter.app.build import build_plan
from learnfilter.app.grounds import Place
from learnfilter.app.lattices import Lattices
from learnfilter.app.models import LEARNED, POLICY, Stored, settings_of, store, stored
from learnfilter.app.movers import stored_policy
from learnfilter.app.progress import progress
from learnfilter.app.studying import recorded_place
from learnfilter.app.training import config_hash, filter_settings, stage_settings
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.files import whole_file
from learnfilter.filtering.course import Ground
from learnfilter.training.recipe import MatchingSettings, Trainer


def as_started(settings: TrainConfig, start: Path) -> TrainConfig:
    """The settings with sensor, lattice, motion and model of the run that is gone on from.

    Where its models are not tuned but taken along, also with what they were trained on.
    """
    made_with, kept = settings_of(start), ["strip", "grid", "motion", "observe", "condition"]
    if not settings.drives:
        kept += ["train", "site"]
    return replace(settings, **{key: getattr(made_with, key) for key in kept})


def take_models_along(settings: TrainConfig, folder: Path) -> dict[str, Stored]:
    """Copy the models of the run that `start` names; returns them."""
    assert settings.start is not None
    models = stored(Path(settings.start), settings)
    for name in models:
        _take_along(Path(settings.start), name, folder)
    return models


def take_policy_along(settings: TrainConfig, folder: Path) -> None:
    """Copy the policy of the run that `start` names, where it has one."""
    assert settings.start is not None
    if stored_policy(Path(settings.start)) is not None:
        _take_along(Path(settings.start), POLICY, folder)


def _take_along(start: Path, name: str, folder: Path) -> None:
    file = f"{name}.safetensors"
    with whole_file(folder / "models" / file) as beside:
        shutil.copyfile(start / "models" / file, beside)


def tuning_place(settings: TrainConfig) -> Place:
    """The recorded drives that `drives` and `blocks` name, on the plan they were driven on."""
    return recorded_place(settings, build_plan(settings.site), settings.drives, settings.blocks, False)


def tune_models(settings: TrainConfig, place: Place, folder: Path) -> dict[str, Stored]:
    """Tune and store the learned model of the run that `start` names, and its best analytic one.

    The weights that do best on the same drives are kept, so only other drives can judge them.

    Args:
        settings: of the verb, see `as_started`.
        place: recorded drives.
        folder: of the run.
    """
    assert settings.start is not None
    models, recipe = _worth_tuning(stored(Path(settings.start), settings)), settings.train
    cache, tuned = Path(settings.runs) / "cache", {}
    common = next(iter(models.values())).lattices

    def on(lattices: Lattices) -> list[Ground]:
        return [lattices.ground(lattices.render(place.plan, cache), place.drives)]

    scored = on(common)
    with Board(folder / "events", scored[0].site) as board, progress("tuning") as tick:
        for name, model in models.items():
            laid = on(model.lattices)
            trainer = Trainer(
                laid, laid, scored, filter_settings(settings), MatchingSettings(), settings.seed,
                folder / "checkpoints", board, tick,
            )  # fmt: skip
            stage = stage_settings(f"recorded-{name}", recipe.recorded)
            trained = trainer.go_on(model.model, model.motion, stage)
            facts = {key: model.facts[key] for key in ("floor", "grid", "parameters")}
            facts |= {"seed": settings.seed, "config": config_hash(settings)}
            tuned[name] = store(folder / "models", name, trained, model.lattices, facts)
    return tuned


def _worth_tuning(models: dict[str, Stored]) -> dict[str, Stored]:
    """The learned model, and the analytic one with the fewest nats on the drives it was chosen by."""
    analytic = {name: model.facts["validation"] for name, model in models.items() if not model.learned}
    return {name: models[name] for name in (choose_analytic(analytic), LEARNED)}

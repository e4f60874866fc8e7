"""Train every model of a run: fit and tune the analytic ones, then the matcher born from the best."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import asdict, replace
from itertools import count
from pathlib import Path
from typing import Any, NamedTuple

import torch

from learnfilter.app.board import Board
from learnfilter.app.build import build_conditions, build_strip
from learnfilter.app.grounds import Place, Rehearsal, build_motion, lay, make_places
from learnfilter.app.lattices import Lattices, build_lattices
from learnfilter.app.models import LEARNED, Stored, store
from learnfilter.app.progress import progress
from learnfilter.app.recipes import StageConfig
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.seeds import stream
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionSettings
from learnfilter.observe.blend import Blend
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.training.analytic import BirthSettings, Fits, birth_of, fit_analytic, without_knowledge
from learnfilter.training.loop import StageSettings
from learnfilter.training.recipe import (
    FilterSettings,
    MatchingSettings,
    Trained,
    Trainer,
    blend_kinds,
    parameters,
)
from learnfilter.training.shake import ShakeSettings
from learnfilter.training.validation import validate


def config_hash(settings: object) -> str:
    """SHA-256 of resolved settings, places of files left out."""
    plain = {k: v for k, v in asdict(settings).items() if k not in ("name", "runs")}  # type: ignore[call-overload]
    return hashlib.sha256(json.dumps(plain, sort_keys=True).encode()).hexdigest()


def rehearsal_of(settings: TrainConfig, sites: int, drives: int, rows: int, stills: int) -> Rehearsal:
    """What is made up to train or judge on, by the settings' families and conditions."""
    site = settings.site
    return Rehearsal(
        tuple(site.families), sites, drives, rows, stills, site.width_m, site.depth_m,
        build_conditions(settings.condition),
    )  # fmt: skip


class Material(NamedTuple):
    """What models are trained on and chosen by: places, not yet laid on a lattice.

    Attributes:
        train, held_out: places.
        lay: (purpose, place, lattices, stills) -> the place on a lattice.
    """

    train: tuple[Place, ...]
    held_out: tuple[Place, ...]
    lay: Callable[[str, Place, Lattices, bool], Ground]

    def grounds(self, lattices: Lattices, stills: bool) -> tuple[list[Ground], list[Ground]]:
        """Both on one lattice; with strips at random poses for the matching stage, where asked."""
        with progress("laying sites") as tick:
            total, done = len(self.train) + len(self.held_out), count(1)
            laid: dict[str, list[Ground]] = {"train": [], "validation": []}
            for purpose, places in (("train", self.train), ("validation", self.held_out)):
                for place in places:
                    wanted = stills and purpose == "train"
                    laid[purpose].append(self.lay(purpose, place, lattices, wanted))
                    tick(next(done), total, "")
        return laid["train"], laid["validation"]


def training_material(settings: TrainConfig) -> Material:
    """Sites to train on, and sites to choose weights by, with the drives on them."""
    recipe, strip, radius_m = settings.train, build_strip(settings.strip), settings.grid.robot_radius_m
    rehearsal = rehearsal_of(settings, recipe.sites, recipe.drives, recipe.rows, recipe.stills)
    few = replace(rehearsal, sites=recipe.validation_sites)
    made = []
    for purpose, wanted in (("train", rehearsal), ("validation", few)):
        with progress(f"{purpose} sites") as tick:
            places = []
            for place in make_places(wanted, strip, radius_m, settings.seed, purpose):
                places.append(place._replace(worlds=()))  # many, and only an oracle would read them
                tick(len(places), wanted.sites, "")
        made.append(tuple(places))

    def lay_one(purpose: str, place: Place, lattices: Lattices, stills: bool) -> Ground:
        asked = rehearsal if stills else replace(rehearsal, stills=0)
        return lay(place, lattices, strip, asked, settings.seed, purpose)

    return Material(made[0], made[1], lay_one)


def stage_settings(name: str, settings: StageConfig) -> StageSettings:
    """A stage under the name that its checkpoints get."""
    return StageSettings(name=name, **asdict(settings))


def _birth(parent: ObservationModel, fits: Fits, settings: TrainConfig) -> Birth:
    """What the matcher is born from: the tuned blend, at the ranks that `observe` asks for."""
    assert isinstance(parent, Blend)
    observe = settings.observe
    ranks = BirthSettings(
        observe.range_first_m, observe.range_growth, observe.range_rank, observe.colour_rank
    )
    birth = birth_of(parent, fits, ranks)
    return birth if observe.analytic_start else without_knowledge(birth, stream(settings.seed, "blank"))


def untrained_gap(
    settings: TrainConfig, models: dict[str, Stored], train: Sequence[Ground], held_out: Sequence[Ground]
) -> float:
    """Nats that an untrained matcher differs from the blend it is born from: mean over first strips.

    Args:
        settings: of the run.
        models: its models; the tuned blend is taken from them.
        train: the grounds they were fitted to.
        held_out: where both are scored.
    """
    lattices = build_lattices(settings)
    fits = fit_analytic(train, settings.strip.max_range_m, stream(settings.seed, "fit"))
    parent = models["beam+colour" if fits.colour else "beam"]
    birth = _birth(parent.model, fits, settings)
    newborn = Matcher(lattices.layout, birth, MatcherShape(), torch.Generator().manual_seed(0))
    nats = [
        validate(model, parent.motion, held_out, held_out, settings.motion.floor, 1).score
        for model in (newborn, parent.model)
    ]
    return abs(nats[0] - nats[1])


def train_models(settings: TrainConfig, folder: Path) -> dict[str, Stored]:
    """Train and store all models of a run; taken up again where an earlier process stopped.

    Args:
        settings: of the verb.
        folder: of the run; gets models/, checkpoints/ and TensorBoard events.
    """
    lattices, recipe = build_lattices(settings), settings.train
    material = training_material(settings)
    train, held_out = material.grounds(lattices, stills=recipe.matching.iterations > 0)
    fits = fit_analytic(train, settings.strip.max_range_m, stream(settings.seed, "fit"))
    motion = build_motion(settings.motion)
    facts = {"floor": settings.motion.floor, "seed": settings.seed, "config": config_hash(settings)}
    models: dict[str, Stored] = {}

    def keep(name: str, trained: Trained, on: Lattices, grid: Mapping[str, Any]) -> Trained:
        extra = facts | {"parameters": parameters(trained.model), "grid": dict(grid)}
        models[name] = store(folder / "models", name, trained, on, extra)
        return trained

    with Board(folder / "events", held_out[0].site) as board, progress("training") as tick:

        def trainer_on(grounds: Sequence[Ground], validation: Sequence[Ground]) -> Trainer:
            return Trainer(
                grounds, validation, held_out, filter_settings(settings),
                MatchingSettings(recipe.strips, recipe.decoys), settings.seed, folder / "checkpoints",
                board, tick,
            )  # fmt: skip

        trainer, tuned = trainer_on(train, held_out), {}
        for kind in blend_kinds(fits.colour is not None):
            stage = stage_settings(f"tuning-{kind}", recipe.tuning)
            tuned[kind] = keep(
                kind, trainer.tune_blend(kind, fits, lattices.layout, motion, stage), lattices, {}
            )
        best = min(tuned, key=lambda kind: models[kind].facts["validation"])
        for name, trained, on, grid in _search(settings, material, trainer_on, best, models[best], motion):
            keep(name, trained, on, grid)
        parent = tuned["beam+colour" if fits.colour else "beam"]
        observe = settings.observe
        shape = MatcherShape(
            observe.extra_rank, observe.strip_hidden, observe.ring_hidden, observe.kernel, observe.residual
        )
        learned = trainer.train_matcher(
            _birth(parent.model, fits, settings), shape, lattices.layout, parent.motion.settings(),
            stage_settings("matching", recipe.matching), stage_settings("filtering", recipe.filtering),
        )  # fmt: skip
        keep(LEARNED, learned, lattices, {})
    return models


def filter_settings(settings: TrainConfig) -> FilterSettings:
    """How drives are shown to a filter in training."""
    recipe = settings.train
    return FilterSettings(
        tuple(recipe.lengths), recipe.every_step, settings.motion.floor, recipe.hide_colour,
        recipe.validation_steps, ShakeSettings(**asdict(recipe.shake)),
    )  # fmt: skip


def _search(
    settings: TrainConfig,
    material: Material,
    trainer_on: Callable[[Sequence[Ground], Sequence[Ground]], Trainer],
    kind: str,
    base: Stored,
    motion: MotionSettings,
) -> Iterator[tuple[str, Trained, Lattices, dict[str, Any]]]:
    """Tune the best analytic model on other lattices, one change after the other, keeping what helps.

    Every candidate is tuned through the filter on the same drives with the same budget, and all of them are
    kept as models of the run: the search is its own log.
    """
    kept, best = dict[str, Any](), base.facts["validation"]
    for change in settings.train.search:
        grid = kept | change
        lattices = build_lattices(settings, grid)
        train, held_out = material.grounds(lattices, stills=False)
        fits = fit_analytic(train, settings.strip.max_range_m, stream(settings.seed, "fit"))
        name = f"{kind} {','.join(f'{key}={value}' for key, value in grid.items())}"
        stage = stage_settings(f"tuning-{name}", settings.train.tuning)
        trained = trainer_on(train, held_out).tune_blend(kind, fits, lattices.layout, motion, stage)
        (result,) = trained.stages.values()
        if result.best_score < best:
            kept, best = grid, result.best_score
        yield name, trained, lattices, grid

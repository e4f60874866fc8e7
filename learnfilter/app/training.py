"""Train every model of a run: fit and tune the analytic ones, then the matcher born from the best."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path

import torch

from learnfilter.app.board import Board
from learnfilter.app.build import build_conditions, build_strip
from learnfilter.app.grounds import Lattices, Rehearsal, build_lattices, build_motion, make_grounds
from learnfilter.app.models import LEARNED, Stored, store
from learnfilter.app.progress import progress
from learnfilter.app.recipes import StageConfig
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.seeds import stream
from learnfilter.filtering.course import Ground
from learnfilter.observe.blend import Blend
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.training.analytic import BirthSettings, Fits, birth_of, fit_analytic
from learnfilter.training.loop import StageSettings
from learnfilter.training.recipe import (
    FilterSettings,
    MatchingSettings,
    Trained,
    Trainer,
    blend_kinds,
    parameters,
)
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


def training_grounds(settings: TrainConfig, lattices: Lattices) -> tuple[Sequence[Ground], Sequence[Ground]]:
    """Sites to train on, and sites to choose weights by."""
    recipe, strip = settings.train, build_strip(settings.strip)
    grounds = []
    for purpose, sites, stills in (
        ("train", recipe.sites, recipe.stills),
        ("validation", recipe.validation_sites, 0),
    ):
        rehearsal = rehearsal_of(settings, sites, recipe.drives, recipe.rows, stills)
        with progress(f"{purpose} sites") as tick:
            grounds.append(make_grounds(rehearsal, strip, lattices, settings.seed, purpose, tick).grounds)
    return grounds[0], grounds[1]


def _stage(name: str, settings: StageConfig) -> StageSettings:
    return StageSettings(name=name, **asdict(settings))


def _birth(parent: ObservationModel, fits: Fits, settings: TrainConfig) -> Birth:
    """What the matcher is born from: the tuned blend, at the ranks that `observe` asks for."""
    assert isinstance(parent, Blend)
    observe = settings.observe
    ranks = BirthSettings(
        observe.range_first_m, observe.range_growth, observe.range_rank, observe.colour_rank
    )
    return birth_of(parent, fits, ranks)


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
        validate(model, parent.motion, held_out, settings.motion.floor, 1).score
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
    train, held_out = training_grounds(settings, lattices)
    fits = fit_analytic(train, settings.strip.max_range_m, stream(settings.seed, "fit"))
    motion = build_motion(settings.motion)
    facts = {"floor": settings.motion.floor, "seed": settings.seed, "config": config_hash(settings)}
    models: dict[str, Stored] = {}

    with Board(folder / "events", held_out[0].site) as board, progress("training") as tick:
        trainer = Trainer(
            train,
            held_out,
            FilterSettings(
                tuple(recipe.lengths),
                recipe.every_step,
                settings.motion.floor,
                recipe.hide_colour,
                recipe.validation_steps,
            ),
            MatchingSettings(recipe.strips, recipe.decoys),
            settings.seed,
            folder / "checkpoints",
            board,
            tick,
        )

        def keep(name: str, trained: Trained) -> Trained:
            extra = facts | {"parameters": parameters(trained.model)}
            models[name] = store(folder / "models", name, trained, extra)
            return trained

        tuned = {
            kind: keep(
                kind, trainer.tune_blend(kind, fits, lattices.layout, motion, _stage("tuning", recipe.tuning))
            )
            for kind in blend_kinds(fits.colour is not None)
        }
        parent = tuned["beam+colour" if fits.colour else "beam"]
        birth = _birth(parent.model, fits, settings)
        observe = settings.observe
        shape = MatcherShape(
            observe.extra_rank, observe.strip_hidden, observe.ring_hidden, observe.kernel, observe.residual
        )
        keep(
            LEARNED,
            trainer.train_matcher(
                birth, shape, lattices.layout, parent.motion.settings(),
                _stage("matching", recipe.matching), _stage("filtering", recipe.filtering),
            ),
        )  # fmt: skip
    return models

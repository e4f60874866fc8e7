"""The models of a training run on disk: one tensor file a model, all an evaluation needs beside it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

from omegaconf import OmegaConf

from learnfilter.ablation.study import Filter
from learnfilter.app.command import compose_settings
from learnfilter.app.config import typed
from learnfilter.app.lattices import Lattices, build_lattices
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.errors import ConfigError
from learnfilter.filtering.motion import MotionModel
from learnfilter.observe.contract import ObservationModel
from learnfilter.observe.describe import describe, rebuild
from learnfilter.training.checkpoint import load_tensors, save_tensors
from learnfilter.training.loop import StageResult
from learnfilter.training.recipe import Trained

LEARNED, POLICY = "matcher", "policy"  # the latter lies beside the models and is none


class Stored(NamedTuple):
    """A model of a training run.

    Attributes:
        name: 'matcher' or the kind of analytic blend.
        model, motion: the filter.
        lattices: the lattice it was tuned on.
        facts: validation score, stages, floor, seed, `grid`: how its lattice differs from the run's.
    """

    name: str
    model: ObservationModel
    motion: MotionModel
    lattices: Lattices
    facts: dict[str, Any]

    @property
    def learned(self) -> bool:
        return self.name == LEARNED

    def contender(self, hide_colour: bool = False) -> Filter:
        """As it enters a study."""
        name = f"{self.name}, colour hidden" if hide_colour else self.name
        return Filter(name, self.model, self.motion, self.facts["floor"], self.lattices, hide_colour)


def store(folder: Path, name: str, trained: Trained, lattices: Lattices, facts: dict[str, Any]) -> Stored:
    """Write a trained model; returns it as it will be read."""
    described, tensors = describe(trained.model)
    whole = {"name": name, "model": described, **stage_facts(trained.stages), **facts}
    motion = {f"motion.{key}": value for key, value in trained.motion.state_dict().items()}
    model = {f"model.{key}": value for key, value in tensors.items()}
    save_tensors(folder / f"{name}.safetensors", model | motion, whole)
    return Stored(name, trained.model, trained.motion, lattices, whole)


def stage_facts(stages: Mapping[str, StageResult]) -> dict[str, Any]:
    """How training went: `stages` by name, and `validation`, the score of the weights that were kept."""
    *_, last = stages.values()  # each stage begins with the best weights of the one before
    told = {
        key: {
            "iterations": s.iterations,
            "best_iteration": s.best_iteration,
            "score": s.best_score,
            "history": s.history,
        }
        for key, s in stages.items()
        if s.iterations
    }
    return {"stages": told, "validation": last.best_score}


def stored(run: Path, made_with: TrainConfig) -> dict[str, Stored]:
    """All models of a training run, by name.

    Args:
        run: its folder.
        made_with: its settings, see `settings_of`.

    Raises:
        ConfigError: there are none.
        InputError: a file is damaged or newer than this program.
    """
    found, folder = {}, run / "models"
    for path in sorted(folder.glob("*.safetensors")):
        if path.stem == POLICY:
            continue
        tensors, facts = load_tensors(path)
        own = {k.removeprefix("model."): v for k, v in tensors.items() if k.startswith("model.")}
        motion = MotionModel()
        motion.load_state_dict(
            {k.removeprefix("motion."): v for k, v in tensors.items() if k.startswith("motion.")}
        )
        lattices = build_lattices(made_with, facts.get("grid"))
        model = rebuild(lattices.layout, facts["model"], own)
        found[facts["name"]] = Stored(facts["name"], model, motion, lattices, facts)
    if not found:
        raise ConfigError(
            "no trained models here", file=folder, place="model", expected="a run of `learnfilter train`"
        )
    return found


def chosen(run: Path, contender: str, made_with: TrainConfig) -> Stored:
    """One model of a training run.

    Raises:
        ConfigError: the run has none of that name.
    """
    models = stored(run, made_with)
    if contender not in models:
        expected = " or ".join(models)
        raise ConfigError("no such model in this run", place="contender", expected=expected, got=contender)
    return models[contender]


def settings_of(run: Path) -> TrainConfig:
    """The settings a training run was made with: sensor, lattice and motion of its models.

    Raises:
        ConfigError: no such run, or its settings cannot be read.
    """
    record = run / "config.yaml"
    if not record.is_file():
        raise ConfigError(
            "no training run here", file=run, place="model", expected="a folder with config.yaml"
        )
    composed = OmegaConf.to_container(OmegaConf.load(record))
    assert isinstance(composed, dict)
    if "train" not in composed:
        raise ConfigError(
            "made by another verb",
            file=record,
            place="model",
            expected="a run of `learnfilter train` or demo",
        )
    known = {key: composed[key] for key in TrainConfig.__dataclass_fields__ if key in composed}
    # an earlier version knew fewer settings: those it did not know are as they are by default
    whole = compose_settings("train", [])
    whole.merge_with(known)
    return typed(whole, TrainConfig)

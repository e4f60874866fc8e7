"""Studies of movers: the same starts on unseen sites, led by each mover, with each model."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cache, partial
from itertools import count
from pathlib import Path

from learnfilter.ablation.motion_study import Bout, Budgets, run_motion_study
from learnfilter.ablation.study import Row
from learnfilter.ablation.verdict import choose_analytic
from learnfilter.app.build import build_conditions, build_plan, build_strip, check_invented
from learnfilter.app.config import hold
from learnfilter.app.exporting import filter_for
from learnfilter.app.grounds import Place, Rehearsal, make_places
from learnfilter.app.judging import write_rows
from learnfilter.app.models import LEARNED, Stored
from learnfilter.app.moving import Venue, localizer_of, run_episode
from learnfilter.app.progress import progress
from learnfilter.app.studying import DRIVES_ON_ONE_PLAN
from learnfilter.app.verb_settings import AblateConfig, TrainConfig
from learnfilter.core.seeds import stream
from learnfilter.movers.contract import Mover
from learnfilter.movers.episode import EpisodeRecord
from learnfilter.sim.conditions import Conditions


@dataclass(frozen=True)
class MotionStudy:
    """Movers, models and where they meet.

    Attributes:
        settings: of the verb.
        made_with: of the models' training run.
        models: by name.
        movers: name -> what makes it anew for an episode.
    """

    settings: AblateConfig
    made_with: TrainConfig
    models: Mapping[str, Stored]
    movers: Mapping[str, Callable[[], Mover]]

    @property
    def budgets(self) -> Budgets:
        """How episodes are judged."""
        study = self.settings.study
        return Budgets(
            tuple(study.marks), tuple(self.settings.metres), study.within_m, math.radians(study.within_deg)
        )

    @property
    def on_one_plan(self) -> bool:
        return self.settings.site.file is not None

    @property
    def starts(self) -> int:
        """On each site, under each condition."""
        return self.settings.study.drives * (DRIVES_ON_ONE_PLAN if self.on_one_plan else 1)

    @property
    def bouts_in_all(self) -> int:
        """How many episodes there are."""
        sites = 1 if self.on_one_plan else self.settings.study.sites
        of_a_site = self.starts * len(self.models) * len(self.movers)
        return len(self.settings.conditions) * sites * of_a_site

    @property
    def title(self) -> str:
        """Where, in words."""
        site, study = self.settings.site, self.settings.study
        if site.file is not None:
            return f"{self.starts} starts on {Path(site.file).stem}"
        return f"{study.sites} invented sites, none seen in training"

    def run(self, folder: Path) -> list[Row]:
        """Drive all episodes; rows.jsonl and rows.parquet go to the folder."""
        done = count(1)
        with progress("movers") as tick:
            rows = run_motion_study(
                self.bouts(), self.budgets, folder / "rows.jsonl",
                lambda note: tick(next(done), self.bouts_in_all, note),
            )  # fmt: skip
        write_rows(rows, folder / "rows.parquet")
        return rows

    def bouts(self) -> Iterator[Bout]:
        """Every mover with every model from every start."""
        for name, conditions, place in self._places():
            left, bottom, right, top = place.plan.bounds
            middle = (left + right) / 2, (bottom + top) / 2
            for model in self.models.values():
                venue = cache(partial(self._venue, place, conditions, model))
                for number in range(self.starts):
                    start = f"{place.plan.name}-{number}"
                    unit = start if self.on_one_plan else place.plan.name
                    for mover in self.movers:
                        yield Bout(
                            mover, model.name, name, place.plan.name, unit, start, place.fold, middle,
                            partial(self._drive, venue, mover, (name, start)),
                        )  # fmt: skip

    def _places(self) -> Iterator[tuple[str, Conditions, Place]]:
        site, strip, radius_m = self.settings.site, build_strip(self.made_with.strip), self._radius_m
        for name, config in self.settings.conditions.items():
            conditions = build_conditions(config)
            if self.on_one_plan:
                yield name, conditions, Place(build_plan(site), ())
                continue
            rehearsal = Rehearsal(
                tuple(site.families),
                self.settings.study.sites,
                0,
                0,
                0,
                site.width_m,
                site.depth_m,
                conditions,
            )
            for place in make_places(rehearsal, strip, radius_m, self.settings.seed, "test"):
                yield name, conditions, place

    @property
    def _radius_m(self) -> float:
        return self.made_with.grid.robot_radius_m

    def _venue(self, place: Place, conditions: Conditions, model: Stored) -> Venue:
        kept = Path(self.settings.runs) / "cache" if self.on_one_plan else None
        localizer = localizer_of(filter_for(self.made_with, model, place.plan, kept))
        return Venue(place.plan, localizer, conditions, self._radius_m)

    def _drive(self, venue: Callable[[], Venue], mover: str, which: tuple[str, str]) -> EpisodeRecord:
        world, episode = stream(self.settings.seed, "movers", *which).spawn(2)  # alike for all movers
        return run_episode(
            venue().world(world), venue().localizer, self.movers[mover](), episode, max(self.budgets.strips),
            most_m=max(self.budgets.metres), until_lock=True,
        )  # fmt: skip


def check_steering(settings: AblateConfig) -> None:
    """Refuse sites that nobody can invent, or a plan that nobody can read, before a run folder is made.

    Raises:
        InputError: which.
    """
    if settings.site.file is None:
        check_invented(settings.site)
    else:
        build_plan(settings.site)


def steered(models: Mapping[str, Stored], names: Sequence[str] | None) -> dict[str, Stored]:
    """The models that a study of movers takes: those named, else the learned and the best analytic one.

    Raises:
        ConfigError: a name the run does not have.
    """
    if names is None:
        analytic = {name: model.facts["validation"] for name, model in models.items() if not model.learned}
        names = [LEARNED, choose_analytic(analytic)]
    known = bool(names) and set(names) <= models.keys()
    hold("study.models", known, f"some of {', '.join(models)}", names)
    return {name: models[name] for name in names}

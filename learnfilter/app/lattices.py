"""How plans and strips are laid on lattices, from the settings of a training run."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from typing import Any

from omegaconf import OmegaConf

from learnfilter.app.build import build_strip
from learnfilter.app.config import GridConfig, typed
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import RingLayout, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import Ground, Truth, course_of
from learnfilter.observe.contract import Strips
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.render import cached_site, grid_for, render_site
from learnfilter.render.site import Site


@dataclass(frozen=True)
class Lattices:
    """How plans are laid on lattices: the plain values of the grid and motion configs.

    Attributes:
        layout: how strips lie on rings.
        cell_m, headings: of the lattice.
        robot_radius_m, max_range_m, windows: see render.render_site.
        after_m, after_rad: see filtering.rollout.weighed_steps.
    """

    layout: RingLayout
    cell_m: float
    headings: int
    robot_radius_m: float
    max_range_m: float
    windows: str
    after_m: float
    after_rad: float

    def render(self, plan: FloorPlan, cache: Path | None = None) -> Site:
        """The plan's site; kept in and taken from the folder `cache` where one is given."""
        render = render_site if cache is None else partial(cached_site, cache)
        return render(
            plan,
            self.layout,
            grid_for(plan, self.headings, self.cell_m),
            robot_radius_m=self.robot_radius_m,
            max_range_m=self.max_range_m,
            windows=self.windows,
        )

    def ground(
        self, site: Site, drives: Sequence[Drive], stills: tuple[Strips, Truth] | None = None
    ) -> Ground:
        """A site with drives cut to courses."""
        return Ground(site, tuple(course_of(d, site, self.after_m, self.after_rad) for d in drives), stills)


def build_lattices(settings: TrainConfig, other: dict[str, Any] | None = None) -> Lattices:
    """How plans are laid on lattices for the sensor.

    Args:
        settings: of a training run.
        other: keys of `grid` that a model's own lattice has otherwise.

    Raises:
        ConfigError: `other` names no setting of the grid, or is out of range.
    """
    unknown = set(other or {}) - set(GridConfig.__dataclass_fields__)
    if unknown:
        expected = " or ".join(GridConfig.__dataclass_fields__)
        raise ConfigError("no such setting", place="train.search", expected=expected, got=", ".join(unknown))
    whole = OmegaConf.create(asdict(settings.grid) | (other or {}))
    grid, motion = typed(whole, GridConfig), settings.motion
    layout = lay_on_ring(build_strip(settings.strip), grid.headings, grid.bearings_per_heading)
    return Lattices(
        layout.every(grid.column_step),
        grid.cell_m,
        grid.headings,
        grid.robot_radius_m,
        settings.strip.max_range_m,
        grid.windows,
        motion.weigh_after_m,
        motion.weigh_after_rad,
    )


def check_search(settings: TrainConfig) -> None:
    """Refuse lattices that cannot be tried, before a run folder is made and minutes are spent.

    Raises:
        ConfigError: a change in `train.search` names no setting of the grid, or makes no lattice.
    """
    for change in settings.train.search:
        build_lattices(settings, change)

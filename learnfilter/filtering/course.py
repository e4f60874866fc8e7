"""A drive on a site, cut to what the filter weighs, with the lattice poses of its truth."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor

from learnfilter.core.errors import DriveError
from learnfilter.core.grid import PoseGrid
from learnfilter.drives.drive import Drive
from learnfilter.filtering.rollout import Steps, weighed_steps
from learnfilter.observe.contract import Strips
from learnfilter.observe.fitting import Sample
from learnfilter.render.site import Site


class Truth(NamedTuple):
    """Lattice pose of each step: live cell number [s], heading bin [s], and whether its own cell was
    live [s] (else the nearest live one stands for it)."""

    cell: Tensor
    heading: Tensor
    own: NDArray[np.bool_]


class Scored(NamedTuple):
    """Where beliefs about one drive are scored.

    Attributes:
        grid: a lattice; beliefs on others are summed to it.
        heading, row, column: [s] the true pose on it.
    """

    grid: PoseGrid
    heading: NDArray[np.int64]
    row: NDArray[np.int64]
    column: NDArray[np.int64]

    def pose(self, step: int) -> tuple[int, int, int]:
        """Index of the true pose at a step."""
        return int(self.heading[step]), int(self.row[step]), int(self.column[step])


class Course(NamedTuple):
    """One drive on one site, ready for the filter.

    Attributes:
        name: of the drive.
        steps: weighed strips and the motion between them.
        truth: lattice poses.
        poses: [s 3] sensor reference poses.
    """

    name: str
    steps: Steps
    truth: Truth
    poses: NDArray[np.float64]

    @property
    def length(self) -> int:
        """Number of weighed strips."""
        return len(self.steps.rows)

    def scored_on(self, site: Site) -> Scored:
        """The true poses on the lattice of the site the course was cut for."""
        cells = site.cells[self.truth.cell.numpy()]
        return Scored(site.grid, self.truth.heading.numpy(), cells[:, 0], cells[:, 1])


class Ground(NamedTuple):
    """A site with what was driven on it.

    Attributes:
        site: rendered plan.
        courses: drives; filtering needs their odometry.
        stills: strips at poses drawn uniformly from the free poses, for the matching stage, with
            their lattice poses; None where there are none.
    """

    site: Site
    courses: tuple[Course, ...]
    stills: tuple[Strips, Truth] | None = None


def truth_of(site: Site, poses: NDArray[np.float64]) -> Truth:
    """Lattice poses of sensor poses [s 3]."""
    cell, heading, own = site.nearest_live(poses)
    return Truth(torch.from_numpy(cell), torch.from_numpy(heading), own)


def course_of(drive: Drive, site: Site, after_m: float, after_rad: float) -> Course:
    """Cut a drive to its weighed strips and find their lattice poses.

    Raises:
        DriveError: a weighed strip has no reference pose.
    """
    steps = weighed_steps(drive, site.layout, after_m, after_rad)
    poses = drive.sensor_reference()[steps.rows]
    if not np.isfinite(poses).all():
        row = int(steps.rows[np.flatnonzero(~np.isfinite(poses).all(axis=1))[0]])
        raise DriveError(
            "no reference pose", file=drive.name, place=f"row {row}", expected="finite x, y, heading"
        )
    return Course(drive.name, steps, truth_of(site, poses), poses)


def sample_of(site: Site, strips: Strips, truth: Truth) -> Sample:
    """Strips with their lattice poses, for fitting."""
    return Sample(site, strips.depth_m.numpy(), strips.rgb.numpy(), truth.cell.numpy(), truth.heading.numpy())

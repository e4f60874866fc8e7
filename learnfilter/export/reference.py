"""The filter as it was trained, run over a drive: what the robot's runtime has to reproduce."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import NDArray

from learnfilter.core.estimate import entropy, modes
from learnfilter.core.poses import compose, through_mount
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.filtering.grid_filter import lattice_of, start
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.rollout import rollout, weighed_steps
from learnfilter.observe.contract import ObservationModel
from learnfilter.render.site import Site
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.estimate import base_mode
from learnfilter.runtime.motion import MotionNoise


class Filter(NamedTuple):
    """All that a bundle is made from.

    Attributes:
        model: observation model, trained or analytic.
        motion: noise of odometry.
        site: the plan, rendered.
        strip: the sensor.
        weighing: when strips count.
    """

    model: ObservationModel
    motion: MotionModel
    site: Site
    strip: Strip
    weighing: Weighing

    @property
    def noise(self) -> MotionNoise:
        """The spreads as plain numbers."""
        return MotionNoise(**self.motion.settings()._asdict())


class Step(NamedTuple):
    """The filter after one weighed strip.

    Attributes:
        row: of the drive.
        belief: [h r c].
        log_evidence: nats of this strip given those before, up to the model's constant.
    """

    row: int
    belief: NDArray[np.float32]
    log_evidence: float


@torch.no_grad()
def filtered(filter_: Filter, drive: Drive, steps: int | None = None) -> Iterator[Step]:
    """Run torch's filter over a drive from an unknown start, at most `steps` weighed strips."""
    model, motion, site, _, weighing = filter_
    lattice, features = lattice_of(site), model.read(site)
    cut = weighed_steps(drive, site.layout, weighing.after_m, weighing.after_rad)
    states = rollout(
        start(lattice, 1),
        cut.odometry[:steps, None],
        lambda s: model.log_likelihood(cut.strips.at(slice(s, s + 1)), features),
        lattice,
        motion,
        weighing.floor,
    )
    before = 0.0
    for row, state in zip(cut.rows[:steps], states, strict=True):
        total = float(state.log_evidence[0])
        yield Step(int(row), state.belief[0].numpy(), total - before)
        before = total


def estimates(filter_: Filter, drive: Drive, steps: list[Step]) -> dict[str, NDArray]:
    """What a robot should report at every row of a drive, from the beliefs after its weighed strips.

    Returns:
        weighed [t], pose [t 3] and covariance [t 3 3] of the robot's base, mass [t], entropy [t],
        log_evidence [t]; after an unweighed strip the last weighed one's, carried by odometry.
    """
    motions = through_mount(drive.odometry, np.asarray(filter_.strip.mount))
    mount, noise = np.asarray(filter_.strip.mount), filter_.noise
    weighed = {step.row: step for step in steps}
    columns: list[tuple] = []
    for row in range(steps[-1].row + 1):
        if row in weighed:
            belief, pending = weighed[row].belief, np.zeros(3)
            mode, nats = modes(belief, filter_.site.grid)[0], entropy(belief)
            log_evidence = weighed[row].log_evidence
        else:
            pending = compose(pending, motions[row])
        base = base_mode(mode, pending, mount, noise)
        columns.append((row in weighed, base.pose, base.covariance, mode.mass, nats, log_evidence))
    names = ("weighed", "pose", "covariance", "mass", "entropy", "log_evidence")
    return {name: np.array(column) for name, column in zip(names, zip(*columns, strict=True), strict=True)}

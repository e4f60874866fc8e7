"""The filter as it was trained, run over a drive: what the robot's runtime has to reproduce."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple, get_args

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor
from torch.nn import functional as F

from learnfilter.core.estimate import entropy, modes
from learnfilter.core.poses import compose, through_mount
from learnfilter.core.strip import Strip
from learnfilter.drives.drive import Drive
from learnfilter.filtering.grid_filter import FilterState, lattice_of, over_cells, start, weigh
from learnfilter.filtering.motion import Lattice, MotionModel, predict
from learnfilter.filtering.rollout import weighed_steps
from learnfilter.observe.contract import ObservationModel
from learnfilter.render.site import Site
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.estimate import base_mode
from learnfilter.runtime.motion import MotionNoise
from learnfilter.runtime.standing import Standing, State
from learnfilter.runtime.watch import Watch

STATES: tuple[State, ...] = get_args(State)  # in the order of their numbers in files


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
        state: whether the pose can be trusted.
        surprise: p-value of the strip; NaN without a watch.
    """

    row: int
    belief: NDArray[np.float32]
    log_evidence: float
    state: State
    surprise: float


@torch.no_grad()
def filtered(
    filter_: Filter, drive: Drive, steps: int | None = None, watch: Watch | None = None
) -> Iterator[Step]:
    """Run torch's filter over a drive from an unknown start, at most `steps` weighed strips.

    Args:
        filter_: to run.
        drive: to run it over.
        steps: None for all.
        watch: of the bundle; after an alarm the search begins anew, as on the robot.
    """
    model, motion, site, _, weighing = filter_
    lattice, features = lattice_of(site), model.read(site)
    cut = weighed_steps(drive, site.layout, weighing.after_m, weighing.after_rad)
    belief, standing = start(lattice, 1).belief, Standing()
    for step, row in enumerate(cut.rows[:steps]):
        if step > 0:
            belief, _ = predict(belief, cut.odometry[step : step + 1], lattice, motion)
        scores = model.log_likelihood(cut.strips.at(slice(step, step + 1)), features)
        after, log_evidence = weigh_active(belief, scores, lattice, weighing)
        watch = None if watch is None else watch.after(log_evidence, standing.lock.held)
        told, alarmed = after[0].numpy(), watch is not None and watch.alarmed
        moved = cut.odometry[step].double().numpy()
        standing = standing.after(modes(told, site.grid)[0], moved, told, site.grid, alarmed)
        if standing.anew:
            after, _ = _weigh_all(belief, scores, lattice, weighing.restart)
        belief = after
        surprise = math.nan if watch is None else watch.p
        yield Step(int(row), belief[0].numpy(), log_evidence, standing.state, surprise)


def weigh_active(
    belief: Tensor, scores: Tensor, lattice: Lattice, weighing: Weighing
) -> tuple[Tensor, float]:
    """Weigh a strip over the cells that can matter, by the rule of `runtime/weighing.py`.

    Args:
        belief: [1 h r c] before the strip.
        scores: [1 n h] nats at the centres of live cells.
        lattice: of the site.
        weighing: floor and the rule's settings.

    Returns:
        [1 h r c] and log evidence, nats.
    """
    cells = belief[0].sum(0).flatten()[lattice.cells]
    active = cells >= weighing.skip_below / len(cells)
    mask = torch.zeros_like(lattice.live)
    mask.view(-1)[lattice.cells[active]] = True
    mask = (F.max_pool2d(mask[None].float(), 3, 1, 1)[0] > 0) & lattice.live
    active = mask.view(-1)[lattice.cells]
    if not 0 < 2 * int(active.sum()) <= len(cells):
        return _weigh_all(belief, scores, lattice, weighing.floor)
    some = lattice._replace(live=mask, cells=lattice.cells[active])
    prior = belief * (1 - weighing.floor) + weighing.floor / (len(cells) * belief.shape[1])
    prior = prior * mask
    after = weigh(FilterState(prior, prior.new_zeros(1)), over_cells(scores[:, active], some), some)
    log_evidence, skipped = float(after.log_evidence[0]), 1.0 - float(prior.double().sum())
    if log_evidence >= math.log(max(skipped, 1e-30) * weighing.skip_ratio):
        return after.belief, log_evidence
    return _weigh_all(belief, scores, lattice, weighing.floor)


def _weigh_all(belief: Tensor, scores: Tensor, lattice: Lattice, floor: float) -> tuple[Tensor, float]:
    state = weigh(FilterState(belief, belief.new_zeros(1)), over_cells(scores, lattice), lattice, floor)
    return state.belief, float(state.log_evidence[0])


def estimates(filter_: Filter, drive: Drive, steps: list[Step]) -> dict[str, NDArray]:
    """What a robot should report at every row of a drive, from the beliefs after its weighed strips.

    Returns:
        weighed [t], pose [t 3] and covariance [t 3 3] of the robot's base, mass [t], entropy [t],
        log_evidence [t], state [t] (uint8, a place in STATES), surprise [t] (NaN without a watch); after an
        unweighed strip the last weighed one's, carried by odometry.
    """
    mount, noise = np.asarray(filter_.strip.mount), filter_.noise
    motions = through_mount(drive.odometry, mount)
    weighed = {step.row: step for step in steps}
    columns: list[tuple] = []
    for row in range(steps[-1].row + 1):
        if row in weighed:
            step, pending = weighed[row], np.zeros(3)
            mode, nats = modes(step.belief, filter_.site.grid)[0], entropy(step.belief)
        else:
            pending = compose(pending, motions[row])
        base = base_mode(mode, pending, mount, noise)
        state = np.uint8(STATES.index(step.state))
        told = (mode.mass, nats, step.log_evidence, state, step.surprise)
        columns.append((row in weighed, base.pose, base.covariance, *told))
    names = ("weighed", "pose", "covariance", "mass", "entropy", "log_evidence", "state", "surprise")
    return {name: np.array(column) for name, column in zip(names, zip(*columns, strict=True), strict=True)}

"""Give a recorded drive reference poses: a fixed-interval smoother on the filter's own lattice.

p(pose_t | all strips) is, up to a constant, the filtered belief times what the later strips say of
pose_t.  The latter runs backwards through the transpose of the prediction step.  That step is linear
in the belief but for its normaliser, so its transpose is its vector-Jacobian product: no second
discretisation that could drift from the first.

Source: forward-backward smoothing, Rabiner (1989); Särkkä (2013), ch. 8.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import ArrayLike, NDArray
from torch import Tensor

from learnfilter.core.errors import DriveError, ImpossibleEvidence
from learnfilter.core.estimate import modes
from learnfilter.core.poses import compose, inverse, wrap
from learnfilter.drives.drive import Drive
from learnfilter.filtering.grid_filter import FilterState, lattice_of, over_cells, start, weigh
from learnfilter.filtering.motion import Lattice, MotionModel, predict
from learnfilter.filtering.rollout import weighed_steps
from learnfilter.observe.contract import ObservationModel
from learnfilter.render.site import Site

SURE_MASS = 0.9  # a pose with less smoothed mass near it is no reference
# How well a person knows a pose that they mark on the plan.
KNOWN_SPREAD_M, KNOWN_SPREAD_RAD = 0.3, np.radians(15.0)


class Labels(NamedTuple):
    """What all strips of a drive say of its poses.

    Attributes:
        reference: [t 3] x_m, y_m, heading_rad of the robot, NaN where it is not sure.
        rows: [s] row of the drive each weighed strip is.
        pose: [s 3] mean of the best mode, sensor pose.
        covariance: [s 3 3] of the mass near it, metres and radians.
        mass: [s] probability near it, given all strips.
    """

    reference: NDArray[np.float64]
    rows: NDArray[np.int64]
    pose: NDArray[np.float64]
    covariance: NDArray[np.float64]
    mass: NDArray[np.float64]


def smoothed_beliefs(
    state: FilterState,
    odometry: Tensor,
    log_likelihood: Callable[[int], Tensor],
    lattice: Lattice,
    motion: MotionModel,
    floor: float,
) -> Iterator[tuple[int, Tensor]]:
    """Yield each step with p(pose | all strips) [h r c], last step first.

    Filtered beliefs are kept for some steps only and computed again from there: memory grows with the
    root of the drive's length.  (Keeping but their large entries would lose the true pose wherever the
    filter was wrong for a while, which is where a smoother is needed.)

    Args:
        state: the belief to begin with, a batch of one.
        odometry: [s 3] sensor motion; the first is not applied.
        log_likelihood: step -> [1 n h] nats; asked for each step three times.
        lattice, motion, floor: see `weigh` and `predict`.

    Raises:
        ImpossibleEvidence: as `weigh`, or the strips contradict each other.
    """

    @torch.no_grad()
    def after(state: FilterState, step: int) -> FilterState:
        if step > 0:
            belief, _ = predict(state.belief, odometry[step, None], lattice, motion)
            state = FilterState(belief, state.log_evidence)
        return weigh(state, log_likelihood(step), lattice, floor)

    count, stride = len(odometry), math.isqrt(len(odometry)) + 1
    kept = [state]  # before step 0, stride, 2 stride, ...
    for step in range(count):
        state = after(state, step)
        if (step + 1) % stride == 0:
            kept.append(state)
    live = lattice.live.to(state.belief.dtype).expand_as(state.belief)
    later = live  # what the later strips say of each pose, up to a constant
    for first in reversed(range(0, count, stride)):
        run = [kept[first // stride]]
        for step in range(first, min(first + stride, count)):
            run.append(after(run[-1], step))
        for step in reversed(range(first, first + len(run) - 1)):
            before, filtered = run[step - first], run[step - first + 1]
            both = filtered.belief * later
            if not both.sum() > 0:
                raise ImpossibleEvidence(f"the strips before and after weighed strip {step} contradict")
            yield step, _share(both)[0]
            if step > 0:
                seen = weigh(FilterState(_share(later), state.log_evidence), log_likelihood(step), lattice)
                later = live * _carry_back(
                    before.belief, seen.belief, odometry[step, None], lattice, motion, floor
                )


def _share(positive: Tensor) -> Tensor:
    return positive / positive.sum()


def _carry_back(
    before: Tensor, later: Tensor, odometry: Tensor, lattice: Lattice, motion: MotionModel, floor: float
) -> Tensor:
    """Transpose of one prediction: from what `later` says of poses after the motion to before it.

    The forward pass divides what is left by its mass and then spreads `floor`; so does this.
    """
    before = before.detach().requires_grad_()
    predicted, lost = predict(before, odometry, lattice, motion)
    # predicted x what is left is linear in `before`, whatever its value
    (transposed,) = torch.autograd.grad((predicted * later).sum() * (1 - lost).sum(), before)
    kept = 1 - lost.detach()
    uniform = later.sum() / (lattice.live.sum() * len(lattice.headings))
    if kept.item() <= 1e-12:  # all was lost: the forward pass began anew from everywhere
        return uniform.expand_as(later)
    # clamped: rounding leaves values of either sign where nothing leads on
    return _share((1 - floor) * transposed.clamp(min=0) / kept + floor * uniform)


def smooth(
    drive: Drive,
    site: Site,
    model: ObservationModel,
    motion: MotionModel,
    *,
    after_m: float,
    after_rad: float,
    floor: float,
    known: Mapping[int, ArrayLike] | None = None,
) -> Labels:
    """Label a drive with what all of its strips say of each pose.

    Args:
        drive: strips and odometry.
        site: the plan it was driven on.
        model, motion, floor: the filter.
        after_m, after_rad: which strips are weighed, see `weighed_steps`.
        known: row of the drive -> [3] pose of the robot that somebody marked on the plan.

    Returns:
        Labels; rows between weighed strips follow by odometry from the one before.

    Raises:
        DriveError: a known pose is of a row that the drive does not have.
        ImpossibleEvidence: no live pose explains a strip.
    """
    steps = weighed_steps(drive, site.layout, after_m, after_rad)
    lattice, features = lattice_of(site), model.read(site)
    marks = _marks(drive, site, steps.rows, known or {})

    def log_likelihood(step: int) -> Tensor:
        with torch.no_grad():
            evidence = model.log_likelihood(steps.strips.at(slice(step, step + 1)), features)
        evidence = over_cells(evidence, lattice)
        return evidence + marks[step] if step in marks else evidence

    count = len(steps.rows)
    pose, covariance, mass = np.empty((count, 3)), np.empty((count, 3, 3)), np.empty(count)
    beliefs = smoothed_beliefs(start(lattice, 1), steps.odometry, log_likelihood, lattice, motion, floor)
    for step, belief in beliefs:
        best = modes(belief.numpy(), site.grid)[0]
        pose[step], covariance[step], mass[step] = best.pose, best.covariance, best.mass
    sure = np.where((mass >= SURE_MASS)[:, None], pose, np.nan)
    robot = compose(sure, inverse(np.asarray(drive.strip.mount)))
    return Labels(_between_steps(drive, steps.rows, robot), steps.rows, pose, covariance, mass)


def _between_steps(drive: Drive, rows: NDArray[np.int64], robot: NDArray) -> NDArray[np.float64]:
    """[t 3] poses of every row, by odometry from the last of `rows` at or before it."""
    reference = np.empty((len(drive), 3))
    reference[rows] = robot
    for row in np.setdiff1d(np.arange(len(drive)), rows):
        reference[row] = compose(reference[row - 1], drive.odometry[row])
    return reference


def _marks(
    drive: Drive, site: Site, rows: NDArray[np.int64], known: Mapping[int, ArrayLike]
) -> dict[int, Tensor]:
    """Step -> [n h] nats of the poses that somebody marked, carried back to the weighed strip before."""
    marks: dict[int, Tensor] = {}
    x, y = site.grid.x_centres()[site.cells[:, 1]], site.grid.y_centres()[site.cells[:, 0]]
    for row, marked in known.items():
        if not 0 <= row < len(drive):
            raise DriveError(
                "no such row",
                file=drive.name,
                place="known poses",
                expected=f"0 to {len(drive) - 1}",
                got=row,
            )
        step = int(np.searchsorted(rows, row, side="right")) - 1
        pose = np.asarray(marked, dtype=float)
        for later in range(row, int(rows[step]), -1):
            pose = compose(pose, inverse(drive.odometry[later]))
        pose = compose(pose, np.asarray(drive.strip.mount))
        away = ((x - pose[0]) ** 2 + (y - pose[1]) ** 2) / KNOWN_SPREAD_M**2
        turned = wrap(site.grid.heading_centres() - pose[2]) ** 2 / KNOWN_SPREAD_RAD**2
        nats = torch.from_numpy(-0.5 * (away[:, None] + turned)).float()
        marks[step] = marks.get(step, torch.zeros(())) + nats
    return marks

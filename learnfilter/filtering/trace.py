"""Run a model's filter along courses and write down, strip by strip, what it believed."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from typing import NamedTuple

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor

from learnfilter.core.estimate import credible_rank, entropy, modes
from learnfilter.core.grid import PoseGrid
from learnfilter.core.regrid import regrid
from learnfilter.core.seeds import stream
from learnfilter.filtering.course import Course, Scored
from learnfilter.filtering.grid_filter import lattice_of, start
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.rollout import rollout
from learnfilter.observe.contract import ObservationModel
from learnfilter.render.site import Site


class Trace(NamedTuple):
    """One drive through one filter, from an unknown start.

    Attributes:
        estimate: [s 3] mean of the best mode, sensor pose.
        mass: [s] belief near it.
        log_truth: [s] nats, log-probability of the true lattice pose.
        rank: [s] randomised credible rank of the true lattice pose.
        entropy: [s] nats.
        seconds: wall time a strip, mean over the drive (strips are scored many at once).
        marginals: [s r c] belief summed over headings, on the lattice it is scored on; None if not asked.
    """

    estimate: NDArray[np.float64]
    mass: NDArray[np.float64]
    log_truth: NDArray[np.float64]
    rank: NDArray[np.float64]
    entropy: NDArray[np.float64]
    seconds: float
    marginals: NDArray[np.float32] | None


TINY = 1e-30  # a belief of exactly zero at the truth costs 69 nats instead of infinitely many
TOGETHER = 16  # strips scored at once: each pass over a site's table then serves many


Memory = dict[bytes, Tensor]  # what a model said of the last strips on a site, [n h] by a strip's bytes


def _in_order(
    model: ObservationModel, course: Course, count: int, features: object, memory: Memory
) -> Callable[[int], Tensor]:
    """step -> [1 n h], for steps asked for in order; strips in memory are not scored again."""
    strips = course.steps.strips
    keys = [
        depth.numpy().tobytes() + rgb.numpy().tobytes()
        for depth, rgb in zip(strips.depth_m[:count], strips.rgb[:count], strict=True)
    ]

    def at(step: int) -> Tensor:
        if keys[step] not in memory:
            ahead = range(step, min(step + TOGETHER, count))
            unknown = [k for k in ahead if keys[k] not in memory]
            scores = model.log_likelihood(strips.at(torch.tensor(unknown)), features)
            memory.update((keys[k], score) for k, score in zip(unknown, scores, strict=True))
        score = memory[keys[step]][None]
        while len(memory) > 2 * TOGETHER:
            memory.pop(next(iter(memory)))
        return score

    return at


@torch.no_grad()
def trace(
    model: ObservationModel,
    motion: MotionModel,
    site: Site,
    course: Course,
    floor: float,
    steps: int | None = None,
    features: object = None,
    keep_marginals: bool = False,
    scored: Scored | None = None,
    memory: Memory | None = None,
) -> Trace:
    """Filter the first `steps` strips of a course.

    Args:
        model, motion, floor: the filter.
        site: the plan it was driven on.
        course: the drive.
        steps: at most this many strips; None for all.
        features: `model.read(site)`, if at hand.
        keep_marginals: keep the belief's plane after each strip, for pictures.
        scored: another lattice on which the true pose's probability is read; None for the site's own.
        memory: of this model on this site, where drives share strips; gets what is scored.
    """
    features = model.read(site) if features is None else features
    lattice = lattice_of(site)
    count = course.length if steps is None else min(steps, course.length)
    states = rollout(
        start(lattice, 1),
        course.steps.odometry[:count, None],
        _in_order(model, course, count, features, {} if memory is None else memory),
        lattice,
        motion,
        floor,
    )
    beliefs = (state.belief[0].numpy() for state in states)
    return write_down(beliefs, site.grid, scored or course.scored_on(site), course.name, keep_marginals)


def write_down(
    beliefs: Iterator[NDArray], grid: PoseGrid, scored: Scored, name: str, keep_marginals: bool = False
) -> Trace:
    """Read off each belief what a trace holds.

    Args:
        beliefs: [h r c] after each strip, made one by one; the time that takes is the filter's.
        grid: their lattice.
        scored: the lattice on which the true pose's probability is read.
        name: of the drive; randomised ranks are drawn under it.
        keep_marginals: see `trace`.
    """
    ranks, columns, planes = stream(0, "rank", name), [], []
    clock = time.perf_counter()
    for step, belief in enumerate(beliefs):
        took = time.perf_counter() - clock
        mode = modes(belief, grid)[0]
        common, at = regrid(belief, grid, scored.grid), scored.pose(step)
        log_truth, rank = np.log(max(float(common[at]), TINY)), credible_rank(common, at, ranks)
        columns.append((mode.pose, mode.mass, log_truth, rank, entropy(belief), took))
        if keep_marginals:
            planes.append(common.sum(0))
        clock = time.perf_counter()
    estimate, mass, log_truths, all_ranks, nats, seconds = (np.array(c) for c in zip(*columns, strict=True))
    marginals = np.stack(planes) if keep_marginals else None
    return Trace(estimate, mass, log_truths, all_ranks, nats, float(seconds.mean()), marginals)

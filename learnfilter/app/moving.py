"""Robots that choose their way in simulated worlds: to train policies, to compare movers, to measure."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from time import perf_counter

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.estimate import mass_near
from learnfilter.core.poses import compose, wrap
from learnfilter.core.seeds import stream
from learnfilter.drives.metrics import located
from learnfilter.export import Filter
from learnfilter.export.rings import packed
from learnfilter.export.robot import robot_model
from learnfilter.movers.contract import Mover, Situation
from learnfilter.movers.episode import EpisodeRecord
from learnfilter.movers.least_entropy import LeastEntropy
from learnfilter.movers.policy import Decision, Policy, PolicyNet
from learnfilter.movers.wander import Wander
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.runtime import Bundle, Localizer
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.models import build_model
from learnfilter.runtime.moves import Footprint, Motion, clear_motions
from learnfilter.runtime.proposing import STILL
from learnfilter.runtime.site import read_site, reads_field
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.driver import free_poses
from learnfilter.sim.episode import Stepper
from learnfilter.sim.world import World, build_world
from learnfilter.training.loop import Validation
from learnfilter.training.policy_gradient import Episode, Episodes
from learnfilter.training.returns import RewardSettings, step_rewards

IN_MEMORY = Path("in memory")
Teacher = LeastEntropy | Wander


def localizer_of(filter_: Filter) -> Localizer:
    """A filter as the robot runs it, without writing a bundle: full precision and no watch."""
    facts, weights = robot_model(filter_.model)
    with_field = reads_field(facts)
    rings, about = packed(filter_.site, with_field, "fp32")
    floats = {name: array.astype(np.float32) for name, array in weights.items()}
    site, layout = filter_.site, filter_.site.layout
    bundle = Bundle(
        folder=IN_MEMORY,
        manifest={"precision": "fp32"},
        strip=filter_.strip,
        noise=filter_.noise,
        weighing=filter_.weighing,
        site=read_site(site.grid, layout, about, with_field, Arrays(IN_MEMORY, rings)),
        model=build_model(layout, facts, Arrays(IN_MEMORY, floats)),
        watch=None,
    )
    return Localizer(bundle)


def run_episode(
    world: World,
    localizer: Localizer,
    mover: Mover,
    rng: np.random.Generator,
    strips: int,
    *,
    start: ArrayLike | None = None,
    most_m: float = math.inf,
    until_lock: bool = False,
) -> EpisodeRecord:
    """Switch a robot on somewhere and let a mover lead it.

    Args:
        world: where; the localizer's plan as it is on some day.
        localizer: the filter, which forgets what it believed; its sensor is the robot's.
        mover: is asked after every strip.
        rng: draws the start, the faults of sensor and wheels, and what the mover draws, from streams of
            their own.
        strips: that are measured.
        start: [3] true pose; None for one drawn from the free floor.
        most_m: no further motion is made once the robot has travelled this far.
        until_lock: whether the first lock ends the episode.

    Raises:
        PlanError: the robot does not fit there.
    """
    begins, faults, choices = rng.spawn(3)
    strip = localizer.bundle.strip
    order = np.argsort(strip.bearings_rad)
    bearings = np.array(strip.bearings_rad)[order]
    robot = Stepper(world, strip, faults, free_poses(world, begins, 1)[0] if start is None else start)
    localizer.reset()
    odometry, last, metres, radians, near_truth = np.zeros(3), None, 0.0, 0.0, 0.0
    rows: list[tuple] = []
    while True:
        depth_m, rgb = robot.sense()
        estimate = localizer.step(odometry, depth_m, rgb if strip.has_colour else None, robot.time_s)
        if estimate.weighed:
            truth = compose(robot.reference, strip.mount)
            near_truth = mass_near(localizer.belief, localizer.bundle.site.grid, truth)
        asked = perf_counter()
        motion = mover.next(Situation(depth_m[order], bearings, localizer, last), choices)
        rows.append(
            (
                robot.reference, estimate.pose, bool(located(estimate.pose, robot.reference)),
                estimate.state, estimate.mass, estimate.entropy, near_truth, motion,
                perf_counter() - asked, metres, radians, robot.contacts, robot.people_touched,
            )
        )  # fmt: skip
        found = until_lock and estimate.state == "locked"
        if len(rows) == strips or metres >= most_m or found:
            return EpisodeRecord(*(np.array(column) for column in zip(*rows, strict=True)))
        before, last = robot.pose, motion
        odometry = robot.move(motion)
        metres += float(np.hypot(*(robot.pose - before)[:2]))
        radians += abs(float(wrap(robot.pose[2] - before[2])))


@dataclass(frozen=True, eq=False)
class Venue:
    """A site to be lost on.

    Attributes:
        plan: of it.
        localizer: the filter that robots run there; one episode at a time.
        conditions: how its days differ from the plan.
        radius_m: of the robot.
    """

    plan: FloorPlan
    localizer: Localizer
    conditions: Conditions
    radius_m: float

    def world(self, rng: np.random.Generator) -> World:
        """The site on another day."""
        return build_world(self.plan, rng, self.conditions, robot_radius_m=self.radius_m)


@dataclass(frozen=True)
class Practice:
    """How policies are exercised.

    Attributes:
        motions: to choose from.
        footprint: the robot.
        rewards: what counts.
        episodes: in a batch.
        strips: at most, in an episode; a lock ends it.
    """

    motions: tuple[Motion, ...]
    footprint: Footprint
    rewards: RewardSettings
    episodes: int
    strips: int

    def exercise(
        self, venue: Venue, mover: Mover, rng: np.random.Generator
    ) -> tuple[EpisodeRecord, NDArray[np.float64]]:
        """One episode on a new day, and the reward [t - 1] of each of its motions."""
        world, episode = rng.spawn(2)
        record = run_episode(
            venue.world(world), venue.localizer, mover, episode, self.strips, until_lock=True
        )
        return record, step_rewards(
            self.rewards, record.entropy, record.near_truth, np.diff(record.metres), np.diff(record.radians),
            venue.localizer.scale.poses,
        )  # fmt: skip


@dataclass
class Noting:
    """Moves as a policy decides, and keeps the decisions."""

    policy: Policy
    decisions: list[Decision] = field(default_factory=list)

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """See `Mover.next`."""
        self.decisions.append(self.policy.decide(situation, rng))
        return self.policy.motions[self.decisions[-1].choice]


@dataclass
class Lessons:
    """Moves as one mover says, and keeps what a teacher would have done."""

    mover: Mover
    teacher: Teacher
    decisions: list[Decision] = field(default_factory=list)

    def next(self, situation: Situation, rng: np.random.Generator) -> Motion:
        """See `Mover.next`."""
        motions = self.teacher.motions
        clear = clear_motions(motions, situation.depth_m, situation.bearings_rad, self.teacher.footprint)
        choice = motions.index(self.teacher.next(situation, rng))
        outlook, last = situation.localizer.outlook(motions), np.array(situation.last or STILL)
        self.decisions.append(Decision(outlook, last, clear, choice))
        return self.mover.next(situation, rng)


def episodes_on(venues: Sequence[Venue], practice: Practice) -> Episodes:
    """What `policy_gradient.train_policy` collects: every batch on venues drawn anew."""

    def drive(net: PolicyNet, rng: np.random.Generator) -> list[Episode]:
        policy, driven = Policy(net.robot(), practice.motions, practice.footprint, explores=True), []
        for own in rng.spawn(practice.episodes):
            noting = Noting(policy)
            record, reward = practice.exercise(venues[int(own.integers(len(venues)))], noting, own)
            driven.append(Episode(noting.decisions, reward, ended=record.locked_at is not None))
        return driven

    return drive


def validation_on(
    venues: Sequence[Venue], practice: Practice, net: PolicyNet, seed: int
) -> Callable[[], Validation]:
    """Scores a policy, without exploring, by what it misses of all there is to find out; on the same days."""

    def validate() -> Validation:
        policy = Policy(net.robot(), practice.motions, practice.footprint)
        missed, right, metres = [], [], []
        for number in range(practice.episodes):
            rng = stream(seed, "policy validation", number)
            record, reward = practice.exercise(venues[number % len(venues)], policy, rng)
            missed.append(1 - reward.sum())
            right.append(record.right[-1])
            metres.append(record.metres[-1])
        curves = {"located": float(np.mean(right)), "metres": float(np.mean(metres))}
        return Validation(float(np.mean(missed)), curves)

    return validate


def lessons_on(
    venues: Sequence[Venue],
    practice: Practice,
    mover: Callable[[], Mover],
    teacher: Callable[[], Teacher],
    count: int,
    rng: np.random.Generator,
    tick: Callable[[int, int, str], None],
) -> list[Decision]:
    """Decisions of a teacher in `count` states that a mover gets into, new ones for each episode."""
    decisions: list[Decision] = []
    while len(decisions) < count:
        (own,) = rng.spawn(1)
        lessons = Lessons(mover(), teacher())
        practice.exercise(venues[int(own.integers(len(venues)))], lessons, own)
        decisions += lessons.decisions
        tick(min(len(decisions), count), count, "lessons")
    return decisions[:count]

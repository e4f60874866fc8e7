"""Movers by name: those that need no training, and the policy of a training run on disk."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import torch

from learnfilter.app.build import build_footprint, build_motions, build_strip
from learnfilter.app.config import hold
from learnfilter.app.models import POLICY
from learnfilter.app.verb_settings import TrainConfig
from learnfilter.core.errors import ConfigError
from learnfilter.export import ShippedMover
from learnfilter.movers.contract import Mover
from learnfilter.movers.least_entropy import LeastEntropy
from learnfilter.movers.policy import Policy, PolicyNet
from learnfilter.movers.wander import Wander
from learnfilter.runtime.moves import Footprint, Motion, clear_motions
from learnfilter.training.checkpoint import load_tensors, save_tensors

MOVERS = ("wander", "least-entropy", POLICY)


class StoredPolicy(NamedTuple):
    """A policy of a training run.

    Attributes:
        net: with its trained weights.
        motions: it chooses from.
        footprint: the robot it keeps clear.
        facts: validation score, stages, seed.
    """

    net: PolicyNet
    motions: tuple[Motion, ...]
    footprint: Footprint
    facts: dict[str, Any]

    def mover(self) -> Policy:
        """It as a robot follows it."""
        return Policy(self.net.robot(), self.motions, self.footprint)

    def shipped(self) -> ShippedMover:
        """It as a bundle holds it."""
        facts = self.facts
        return ShippedMover(self.net.weights(), self.motions, self.footprint, facts["seed"], facts["config"])


def robot_of(settings: TrainConfig) -> tuple[tuple[Motion, ...], Footprint]:
    """The motions of a run's robot, and what they must keep clear.

    Raises:
        ConfigError: they cannot be, or the robot could never set off.
    """
    strip, motions = build_strip(settings.strip), build_motions(settings.mover)
    footprint = build_footprint(settings.mover, strip, settings.grid.robot_radius_m)
    open_floor = np.full(strip.columns, strip.max_range_m)
    clear = clear_motions(motions, open_floor, np.sort(strip.bearings_rad), footprint)
    sets_off = any(free and motion.travels for free, motion in zip(clear, motions, strict=True))
    hold("mover.skirt_m", sets_off, "more: this sensor never sees enough to set off", settings.mover.skirt_m)
    return motions, footprint


def store_policy(folder: Path, policy: StoredPolicy) -> None:
    """Write it into a run's folder of models."""
    facts = {
        "name": POLICY,
        "motions": [list(motion) for motion in policy.motions],
        "footprint": asdict(policy.footprint),
        **policy.facts,
    }
    save_tensors(folder / f"{POLICY}.safetensors", policy.net.state_dict(), facts)


def stored_policy(run: Path) -> StoredPolicy | None:
    """The policy of a training run; None where it has none.

    Raises:
        InputError: the file is damaged or newer than this program.
    """
    path = run / "models" / f"{POLICY}.safetensors"
    if not path.exists():
        return None
    tensors, facts = load_tensors(path)
    net = PolicyNet(torch.Generator())
    net.load_state_dict(tensors)
    footprint = facts.pop("footprint")
    motions = tuple(Motion(*motion) for motion in facts.pop("motions"))
    return StoredPolicy(net, motions, Footprint(**{**footprint, "mount": tuple(footprint["mount"])}), facts)


def least_entropy(settings: TrainConfig) -> LeastEntropy:
    """The greedy mover at the prices of a run."""
    mover = settings.mover
    return LeastEntropy(*robot_of(settings), mover.price_nats_per_m, mover.price_nats_per_rad)


def build_movers(names: list[str], run: Path, settings: TrainConfig) -> dict[str, Callable[[], Mover]]:
    """What makes each mover anew for an episode: some remember what they did.

    Args:
        names: some of MOVERS.
        run: whose policy is taken.
        settings: of that run.

    Raises:
        ConfigError: an unknown name, or the run has no policy.
    """
    hold("movers", set(names) <= set(MOVERS), f"some of {', '.join(MOVERS)}", names)
    policy = stored_policy(run) if POLICY in names else None
    if POLICY in names and policy is None:
        raise ConfigError(
            "this run has no policy", file=run, place="movers", expected="learnfilter train ... mover=policy"
        )
    makers: dict[str, Callable[[], Mover]] = {
        "wander": lambda: Wander(*robot_of(settings)),
        "least-entropy": lambda: least_entropy(settings),
    }
    if policy is not None:
        makers[POLICY] = policy.mover
    return {name: makers[name] for name in names}

"""What a motion was worth: rewards, discounted returns and advantage estimates.

Arrays begin with the axis of time [t ...]; further axes are episodes of equal length.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.shapes import check

REWARDS = ("entropy", "pose")
# Belief near the true pose counts as at least this: what a floor leaves there says nothing of progress.
LEAST_MASS = 1e-6


@dataclass(frozen=True)
class RewardSettings:
    """What a policy is rewarded for.

    Attributes:
        reward: 'entropy': nats of entropy that a step removes; 'pose': nats that the belief near the true
            pose gains.
        price: nats that a motion costs, however short: without it a policy has no reason to find itself
            soon, for in the end all ways remove the same entropy.
        price_per_m, price_per_rad: nats that a metre and a radian cost beyond that.
    """

    reward: str = "entropy"
    price: float = 0.3
    price_per_m: float = 0.1
    price_per_rad: float = 0.02

    def __post_init__(self) -> None:
        if self.reward not in REWARDS:
            raise ConfigError(
                "unknown reward", place="reward", expected=" or ".join(REWARDS), got=self.reward
            )
        prices = self.price, self.price_per_m, self.price_per_rad
        if min(prices) < 0:
            raise ConfigError(
                "a motion that pays", place="price, price_per_m, price_per_rad", expected="not below 0",
                got=prices,
            )  # fmt: skip


def step_rewards(
    settings: RewardSettings,
    entropy: NDArray[np.floating],
    mass_near_truth: NDArray[np.floating],
    metres: NDArray[np.floating],
    radians: NDArray[np.floating],
    poses: int,
) -> NDArray[np.float64]:
    """Reward of each motion, in parts of what there was to find out, log(poses).

    Args:
        settings: see RewardSettings.
        entropy: [t + 1] nats of the belief after each strip.
        mass_near_truth: [t + 1] belief near the true pose after each strip.
        metres, radians: [t] of each motion.
        poses: how many the robot may be at.

    Returns:
        [t].
    """
    known = -entropy if settings.reward == "entropy" else np.log(np.maximum(mass_near_truth, LEAST_MASS))
    prices = settings.price + settings.price_per_m * metres + settings.price_per_rad * np.abs(radians)
    return (np.diff(known) - prices) / np.log(poses)


def discounted(reward: ArrayLike, discount: float, last: ArrayLike = 0.0) -> NDArray[np.float64]:
    """Sum of the rewards from each step on, later ones discounted.

    Args:
        reward: [t ...] of each step.
        discount: factor a step.
        last: [...] what follows the last step is worth.

    Returns:
        [t ...].
    """
    returns = np.array(reward, dtype=float)
    worth = np.asarray(last, dtype=float)
    for step in reversed(range(len(returns))):
        returns[step] += discount * worth
        worth = returns[step]
    return returns


def advantages(
    reward: ArrayLike, value: ArrayLike, discount: float, smoothing: float, last: ArrayLike = 0.0
) -> NDArray[np.float64]:
    """Generalised advantage estimate: how much better each step went than its value foretold.

    Args:
        reward: [t ...] of each step.
        value: [t ...] estimated before each step.
        discount: factor a step.
        smoothing: lambda; at 0 one step is looked at, at 1 all that follow.
        last: [...] value after the last step: zero where the episode has ended, an estimate where it was
            cut off.

    Returns:
        [t ...].

    Raises:
        ShapeError: rewards and values differ in length.

    Source: Schulman, Moritz, Levine, Jordan, Abbeel 2015, "High-dimensional continuous control using
    generalized advantage estimation".
    """
    reward, value = np.asarray(reward, dtype=float), np.asarray(value, dtype=float)
    axes = " ".join("tabc"[: reward.ndim])
    check("value", value, axes, **check("reward", reward, axes))
    after = np.concatenate([value[1:], np.broadcast_to(last, value[:1].shape)])
    return discounted(reward + discount * after - value, discount * smoothing)

"""Returns and advantages against the numbers of check_values I13 and I14."""

import numpy as np
import pytest
from scipy.signal import lfilter

from learnfilter.core.errors import ConfigError, ShapeError
from learnfilter.training.returns import RewardSettings, advantages, discounted, step_rewards

REWARD, VALUE = np.array([1.0, 0.0, 2.0]), np.array([0.5, 0.4, 0.3])


@pytest.mark.parametrize(
    ("smoothing", "last", "expected"),
    [
        (0.8, 0.0, [1.64768, 1.094, 1.7]),
        (0.0, 0.0, [0.86, -0.13, 1.7]),  # one step's errors
        (1.0, 0.0, [2.12, 1.4, 1.7]),  # returns less values
        (0.8, 0.2, [1.740992, 1.2236, 1.88]),  # cut off at a state of value 0.2
    ],
)
def test_advantages_of_three_steps(smoothing, last, expected):
    """I13: Schulman et al. 2015 worked by hand, discount 0.9."""
    np.testing.assert_allclose(advantages(REWARD, VALUE, 0.9, smoothing, last), expected, atol=1e-12)


def test_episodes_side_by_side_are_apart():
    """A second column does not change the first."""
    rng = np.random.default_rng(0)
    reward, value, last = rng.normal(size=(7, 4)), rng.normal(size=(7, 4)), rng.normal(size=4)
    alone = [advantages(reward[:, k], value[:, k], 0.9, 0.7, last[k]) for k in range(4)]
    np.testing.assert_allclose(advantages(reward, value, 0.9, 0.7, last), np.transpose(alone), atol=1e-12)


def test_discounting_is_a_filter_run_backwards():
    """scipy's recursive filter on the reversed rewards."""
    reward = np.random.default_rng(0).normal(size=20)
    expected = lfilter([1.0], [1.0, -0.93], reward[::-1])[::-1]
    np.testing.assert_allclose(discounted(reward, 0.93), expected, atol=1e-12)


def test_expected_rewards_of_a_chain_add_up_to_its_values():
    """I14: P = [[.5 .5] [.2 .8]], r = (0, 1), discount 0.9: V = (450/73, 550/73)."""
    step, reward = np.array([[0.5, 0.5], [0.2, 0.8]]), np.array([0.0, 1.0])
    expected_rewards = [reward]
    for _ in range(400):  # 0.9^400 is 5e-19
        expected_rewards.append(step @ expected_rewards[-1])
    np.testing.assert_allclose(discounted(expected_rewards, 0.9)[0], [450 / 73, 550 / 73], rtol=1e-12)


def test_true_values_leave_no_advantage():
    """On a deterministic ring of two states the errors of the exact values are zero."""
    reward = np.tile([0.0, 1.0], 5)
    value = np.tile([0.9 / (1 - 0.81), 1 / (1 - 0.81)], 5)
    np.testing.assert_allclose(advantages(reward, value, 0.9, 0.95, value[0]), 0.0, atol=1e-12)


def test_values_must_be_as_many_as_rewards():
    """The value after the last step is handed over on its own."""
    with pytest.raises(ShapeError, match="value"):
        advantages(REWARD, np.zeros(4), 0.9, 0.9)


ENTROPY, NEAR = np.array([4.0, 3.0, 3.5]), np.array([0.1, 0.4, 0.0])
METRES, RADIANS = np.array([0.5, 0.0]), np.array([0.2, -0.4])


def test_entropy_removed_is_rewarded_and_motion_costs():
    """A nat removed, half a nat added; less 0.3, 0.1 x 0.5 m, 0.25 x 0.2 and 0.25 x 0.4 rad; over log 100."""
    settings = RewardSettings("entropy", price=0.3, price_per_m=0.1, price_per_rad=0.25)
    expected = np.array([1 - 0.3 - 0.05 - 0.05, -0.5 - 0.3 - 0.1]) / np.log(100)
    found = step_rewards(settings, ENTROPY, NEAR, METRES, RADIANS, 100)
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_belief_gained_at_the_true_pose_is_rewarded():
    """log 4 gained; then all lost, which counts down to a millionth."""
    settings = RewardSettings("pose", 0.0, 0.0, 0.0)
    expected = np.log([0.4 / 0.1, 1e-6 / 0.4]) / np.log(100)
    found = step_rewards(settings, ENTROPY, NEAR, METRES, RADIANS, 100)
    np.testing.assert_allclose(found, expected, atol=1e-12)


@pytest.mark.parametrize(
    "bad", [{"reward": "speed"}, {"price": -0.1}, {"price_per_m": -0.1}, {"price_per_rad": -1.0}]
)
def test_a_reward_that_makes_no_sense_is_refused(bad):
    """Unknown, or motion that pays."""
    with pytest.raises(ConfigError):
        RewardSettings(**bad)

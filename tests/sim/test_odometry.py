"""Wheels: noise of the size and law documented."""

import numpy as np

from learnfilter.core.poses import compose
from learnfilter.sim import OdometryNoise, measure_odometry

NO_NOISE = OdometryNoise(0, 0, 0, 0)
N = 4000
# A sample standard deviation of N normal draws errs by 1 / sqrt(2 N) of itself; four of those.
FOUR_ERRORS = 4 / np.sqrt(2 * N)


def repeated(motion):
    """Poses of a robot that makes one motion N times."""
    poses = [np.zeros(3)]
    for _ in range(N):
        poses.append(compose(poses[-1], motion))
    return np.array(poses)


def test_without_noise_odometry_leads_back_to_the_poses():
    """Composing the readings restores every pose."""
    rng = np.random.default_rng(0)
    poses = np.column_stack([rng.uniform(0, 9, (20, 2)), rng.uniform(-np.pi, np.pi, 20)])
    odometry = measure_odometry(poses, rng, NO_NOISE)
    np.testing.assert_array_equal(odometry[0], np.zeros(3))
    for before, motion, after in zip(poses[:-1], odometry[1:], poses[1:], strict=True):
        np.testing.assert_allclose(compose(before, motion), after, atol=1e-12)


def test_spread_is_the_root_of_summed_squares():
    """A motion that travels and turns: both parts of both spreads, by the documented formula."""
    noise = OdometryNoise(0.1, 0.05, 0.2, 0.03)
    odometry = measure_odometry(repeated([0.3, 0.4, -0.7]), np.random.default_rng(1), noise)[1:]
    travel_sd = np.sqrt((0.2 * 0.5) ** 2 + (0.03 * 0.7) ** 2)
    turn_sd = np.sqrt((0.1 * 0.7) ** 2 + (0.05 * 0.5) ** 2)
    np.testing.assert_allclose(odometry.std(axis=0), [travel_sd, travel_sd, turn_sd], rtol=FOUR_ERRORS)


def test_noise_scale_is_a_factor_on_the_spread():
    """The same draws, three times as wide."""
    poses = repeated([0.4, 0.0, 0.2])[:50]
    once, thrice = (measure_odometry(poses, np.random.default_rng(2), noise_scale=s) for s in (1, 3))
    exact = measure_odometry(poses, np.random.default_rng(2), NO_NOISE)
    np.testing.assert_allclose(thrice - exact, 3 * (once - exact), atol=1e-12)


def test_travel_scale_stretches_travel_and_not_turns():
    """Worn wheels count more metres and the same radians."""
    poses = repeated([0.4, 0.1, 0.2])[:3]
    odometry = measure_odometry(poses, np.random.default_rng(3), NO_NOISE, travel_scale=1.1)
    np.testing.assert_allclose(odometry[1:], [[0.44, 0.11, 0.2]] * 2, atol=1e-12)


def test_a_robot_that_stands_reports_no_motion():
    """No motion, no noise."""
    odometry = measure_odometry(np.ones((5, 3)), np.random.default_rng(4))
    np.testing.assert_array_equal(odometry, np.zeros((5, 3)))

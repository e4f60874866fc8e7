"""A robot that takes one motion at a time, in rooms whose distances are known."""

from dataclasses import replace

import numpy as np
import pytest
from invented import EMPTY, room, world_of

from learnfilter.core.errors import PlanError
from learnfilter.core.poses import compose
from learnfilter.core.strip import Strip, even_strip
from learnfilter.sim import Conditions
from learnfilter.sim.clutter import People
from learnfilter.sim.episode import Stepper

STRIP = Strip(even_strip(-40.0, 10.0, 9), mount=(0.1, 0.05, 0.2))
RADIUS_M = 0.25


def stepper(start=(2.0, 2.0, 0.0), conditions=EMPTY, people=None, seed=0):
    """In the middle of a room of 5 x 4 m."""
    world = world_of(room(5, 4), conditions)
    world = world if people is None else replace(world, people=people)
    return Stepper(world, STRIP, np.random.default_rng(seed), start)


def walker(a, b, speed):
    """Somebody who walks from a to b."""
    return People(np.array([[a, b]], float), np.array([speed]), np.zeros(1), np.ones((1, 3)))


def test_a_free_motion_is_made_as_commanded():
    """Shift under the old heading, then turn."""
    robot = stepper((2.0, 2.0, np.pi / 2))
    robot.move([0.5, 0.2, 0.3])
    np.testing.assert_allclose(robot.pose, [1.8, 2.5, np.pi / 2 + 0.3], atol=1e-12)
    assert robot.contacts == 0


def test_a_wall_stops_the_disc_where_it_touches():
    """The wall at x = 5 stops the centre at 4.75 m; the turn is not made."""
    robot = stepper((4.0, 2.0, 0.0))
    odometry = robot.move([2.0, 0.0, 1.0])
    # the way's end is found to the tolerance of a touch, 1e-6 m
    np.testing.assert_allclose(robot.pose, [5 - RADIUS_M, 2.0, 0.0], atol=2e-6)
    assert robot.contacts == 1
    assert odometry[0] == pytest.approx(0.75, abs=0.2)  # measured with 5 % of noise


def test_turning_where_it_was_stopped_is_free():
    """A disc that turns sweeps nothing: one contact, not two."""
    robot = stepper((4.0, 2.0, 0.0))
    robot.move([2.0, 0.0, 0.0])
    robot.move([0.0, 0.0, 1.5])
    assert robot.contacts == 1
    assert robot.pose[2] == pytest.approx(1.5)


def test_a_person_in_the_way_is_counted_and_stops_nobody():
    """Somebody half a metre ahead, as good as standing, is run over once."""
    robot = stepper(people=walker((2.6, 2.0), (2.6, 3.9), 1e-6))
    robot.move([0.5, 0.0, 0.0])
    assert (robot.people_touched, robot.contacts) == (1, 0)
    np.testing.assert_allclose(robot.pose, [2.5, 2.0, 0.0], atol=1e-12)


def test_somebody_who_walks_into_the_way_meanwhile_is_counted():
    """From 1.2 m aside at 1 m/s they cross the way within the 1.7 s that it takes."""
    robot = stepper(people=walker((2.8, 3.2), (2.8, 1.0), 1.0))
    robot.move([1.0, 0.0, 0.0])
    assert robot.people_touched == 1


def test_people_who_stay_away_are_not_counted():
    """Two metres off is no contact."""
    robot = stepper(people=walker((4.5, 3.5), (4.5, 3.0), 0.1))
    robot.move([0.5, 0.0, 0.0])
    assert robot.people_touched == 0


def test_without_noise_odometry_is_what_was_driven():
    """Composed with the pose before it gives the pose after."""
    robot = stepper(conditions=replace(EMPTY, odometry_noise_scale=0.0))
    before = robot.pose
    odometry = robot.move([0.4, -0.1, -0.7])
    np.testing.assert_allclose(compose(before, odometry), robot.pose, atol=1e-12)


def test_worn_wheels_measure_more_travel():
    """The condition is handed on."""
    robot = stepper(conditions=replace(EMPTY, odometry_noise_scale=0.0, odometry_scale=1.1))
    np.testing.assert_allclose(robot.move([0.4, 0.0, 0.2]), [0.44, 0.0, 0.2], atol=1e-12)


def test_time_passes_as_on_a_drive():
    """A pause of 0.2 s, 0.6 m at 0.6 m/s, half a radian at 1 rad/s."""
    robot = stepper()
    robot.move([0.6, 0.0, 0.5])
    assert robot.time_s == pytest.approx(0.2 + 1.0 + 0.5)


def test_the_sensor_looks_from_its_mount():
    """The column along the sensor's axis meets the wall x = 5 from where the mount puts it."""
    still = [stepper(seed=seed).sense()[0][4] for seed in range(9)]
    expected = (5 - 2.1) / np.cos(0.2)
    assert np.nanmedian(still) == pytest.approx(expected, abs=0.06)  # range noise of 1.3 cm at 3 m


def test_a_plan_drawn_too_large_is_read_as_drawn():
    """Twice as large about its middle (2.5, 2): a robot 0.25 m off the middle reads 0.5 m off."""
    robot = stepper((2.75, 2.0, 0.1), replace(Conditions(), furniture_per_100_m2=0, people=0, plan_scale=2.0))
    np.testing.assert_allclose(robot.reference, [3.0, 2.0, 0.1], atol=1e-12)


def test_a_start_in_a_wall_is_refused():
    """By the name of the plan and the pose."""
    with pytest.raises(PlanError, match="does not fit"):
        stepper((4.9, 2.0, 0.0))

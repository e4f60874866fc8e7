"""A robot in a world that takes one motion at a time: what a mover is tried on.

Motions are executed as commanded; the wheels measure them with the usual noise.  Time passes as on a
drive (`sim/driver.py`).  Walls, furniture and shut doors stop the robot where its disc meets them, and it
then does not turn; people step aside, so they stop nobody, but they were touched.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.core.errors import PlanError
from learnfilter.core.poses import compose
from learnfilter.core.strip import Strip
from learnfilter.sim.clutter import PERSON_RADIUS_M
from learnfilter.sim.driver import PAUSE_S, SPEED_M_PER_S, TURN_RATE_RAD_PER_S
from learnfilter.sim.free import clearance
from learnfilter.sim.odometry import measure_odometry
from learnfilter.sim.sensor import sense
from learnfilter.sim.world import World, barriers

TOUCH_M = 1e-6  # a disc that has been stopped at a wall may slide along it
HALVINGS = 30  # of the way to a contact: finds it to TOUCH_M on ways of a kilometre
# People are looked for so often along a way: 4 cm of it at the robot's and the fastest walker's speed.
LOOK_EVERY_S = 0.025


class Stepper:
    """A robot that senses where it stands and makes the motion it is told.

    Args:
        world: where, and under which conditions; those that park a robot have no say here.
        strip: the sensor and its declared mount.
        rng: draws the faults of sensor and wheels, each from a stream of its own.
        start: [3] true pose of the robot at time 0.

    Attributes:
        pose: [3] true pose of the robot.
        time_s: since the start.
        contacts: motions that ended at a wall or at a thing.
        people_touched: motions on which the robot came too near to somebody.

    Raises:
        PlanError: the robot does not fit where it starts.
    """

    def __init__(self, world: World, strip: Strip, rng: np.random.Generator, start: ArrayLike):
        self._world, self._strip = world, strip
        self._wheels, self._sensor = rng.spawn(2)
        self._barriers = barriers(world.truth)
        self.pose = np.array(start, dtype=float)
        self.time_s, self.contacts, self.people_touched = 0.0, 0, 0
        if not self._fits(self.pose[:2], self.pose[:2]):
            raise PlanError(
                "the robot does not fit where it starts", place=world.plan.name, got=self.pose.tolist()
            )

    @property
    def reference(self) -> NDArray[np.float64]:
        """[3] the true pose as it reads on the plan."""
        return self._world.on_plan(self.pose[None])[0]

    def sense(self) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """What the sensor measures now: depth_m [w] and sRGB [w 3], NaN where there is none."""
        sensor_pose = compose(self.pose, self._strip.mount)[None]
        depth_m, rgb = sense(self._world, sensor_pose, np.array([self.time_s]), self._strip, self._sensor)
        return depth_m[0], rgb[0]

    def move(self, motion: ArrayLike) -> NDArray[np.float64]:
        """Make a motion, or as much of it as is free.

        Args:
            motion: [3] forward_m, left_m, turn_rad: straight under the old heading, then the turn.

        Returns:
            [3] the motion as the wheels measured it.
        """
        before, after = self.pose, compose(self.pose, motion)
        if not self._fits(before[:2], after[:2]):
            self.contacts += 1
            after = np.append(self._stop(before[:2], after[:2]), before[2])
        travel, turn = np.hypot(*(after - before)[:2]), abs(float(np.asarray(motion)[2]))
        driving_s = travel / SPEED_M_PER_S
        self.people_touched += travel > 0 and self._meets_people(before[:2], after[:2], driving_s)
        turning_s = turn / TURN_RATE_RAD_PER_S if after[2] != before[2] else 0.0
        self.time_s += PAUSE_S + driving_s + turning_s
        self.pose = after
        conditions = self._world.conditions
        return measure_odometry(
            np.stack([before, after]),
            self._wheels,
            noise_scale=conditions.odometry_noise_scale,
            travel_scale=conditions.odometry_scale,
        )[1]

    def _fits(self, start: NDArray[np.float64], end: NDArray[np.float64]) -> bool:
        """Whether the disc travels from start to end [2] without a contact."""
        return bool(clearance(*start, *end, self._barriers) >= self._world.robot_radius_m - TOUCH_M)

    def _stop(self, start: NDArray[np.float64], end: NDArray[np.float64]) -> NDArray[np.float64]:
        """[2] the farthest place on the way that is reached without a contact."""
        free, met = 0.0, 1.0
        for _ in range(HALVINGS):
            half = (free + met) / 2
            if self._fits(start, start + half * (end - start)):
                free = half
            else:
                met = half
        return start + free * (end - start)

    def _meets_people(self, start: NDArray[np.float64], end: NDArray[np.float64], seconds: float) -> bool:
        """Whether the disc, driving evenly, comes nearer to somebody than both are wide."""
        share = np.linspace(0.0, 1.0, int(np.ceil(seconds / LOOK_EVERY_S)) + 1)
        way = start + share[:, None] * (end - start)
        people = self._world.people.at(self.time_s + share * seconds)
        apart = np.linalg.norm(people - way[:, None], axis=-1)
        return bool((apart < self._world.robot_radius_m + PERSON_RADIUS_M).any())

"""Plain rooms and worlds for the tests of sim."""

from dataclasses import replace

import numpy as np

from learnfilter.plan.floorplan import DOOR, NO_FINISH, SHUT, WALL, Finish, FloorPlan
from learnfilter.sim import Conditions, build_world
from learnfilter.sim.light import Light
from learnfilter.sim.sensor import Faults

NO_FAULTS = Faults(
    sd_m=0, sd_growth_per_m=0, sd_steep=0, missing=0, missing_dark=0, missing_steep=0, burst=0, short=0,
    mixed=0, colour_sd=0, colour_sd_share=0,
)  # fmt: skip
EMPTY = Conditions(furniture_per_100_m2=0, people=0)
PLAIN_LIGHT = Light(np.ones(3), np.zeros((1, 3)), uneven=0.0)


def room(width, height, *, extra=(), doors=(), srgb=(1.0, 1.0, 1.0), finished=True):
    """A rectangle with its lower left corner at the origin; extra walls; doors as (line, state)."""
    corners = np.array([[0, 0], [width, 0], [width, height], [0, height]], float)
    walls = [*np.hstack([corners, np.roll(corners, -1, axis=0)]), *extra]
    n, m = len(walls), len(doors)
    return FloorPlan(
        segments=np.array([*walls, *(line for line, _ in doors)]),
        kind=[WALL] * n + [DOOR] * m,
        state=[SHUT] * n + [state for _, state in doors],
        finish=[0 if finished else NO_FINISH] * (n + m),
        feature=np.arange(n + m),
        finishes=(Finish("paint", srgb),) if finished else (),
    )


def world_of(plan, conditions=EMPTY, seed=0, light=PLAIN_LIGHT):
    """The world of a plan in even, white light."""
    return replace(build_world(plan, np.random.default_rng(seed), conditions), light=light)

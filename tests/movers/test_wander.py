"""The wandering mover, driven in an exact room."""

from itertools import pairwise

import numpy as np
import pytest
import shapely

from learnfilter.core.errors import ConfigError
from learnfilter.core.poses import compose
from learnfilter.core.seeds import stream
from learnfilter.movers.contract import Situation
from learnfilter.movers.wander import Wander
from learnfilter.runtime.moves import Motion

CAMERA = np.radians(np.linspace(-43.6, 43.6, 32))
ROOM = shapely.Polygon([(0, 0), (5, 0), (5, 4), (3, 4), (3, 2), (2, 2), (2, 4), (0, 4)])


def seen(depth_m):
    """A situation in which the filter knows nothing that this mover would ask for."""
    return Situation(depth_m, CAMERA, None, None)


def look(pose):
    """[w] ranges in ROOM from a pose, by shapely."""
    x, y, heading = pose
    ends = np.stack([x + 20 * np.cos(heading + CAMERA), y + 20 * np.sin(heading + CAMERA)], 1)
    rays = shapely.linestrings([[(x, y), end] for end in ends])
    return shapely.distance(shapely.Point(x, y), shapely.intersection(rays, ROOM.exterior))


def drive(seed, steps=60):
    """[t 3] poses of a wandering robot that starts in a corner."""
    mover, rng, poses = Wander(), stream(seed, "wander"), [np.array([0.6, 0.6, 0.3])]
    for _ in range(steps):
        poses.append(compose(poses[-1], mover.next(seen(look(poses[-1])), rng)))
    return np.array(poses)


def test_the_disc_never_touches_a_wall():
    """Every way between two poses keeps the radius of 0.2 m from the room's outline."""
    poses = drive(1)
    ways = [shapely.LineString([a[:2], b[:2] + 1e-9]) for a, b in pairwise(poses)]
    assert min(way.distance(ROOM.exterior) for way in ways) >= 0.2


def test_it_gets_about():
    """Sixty motions lead through more than the corner it started in."""
    assert np.ptp(drive(1)[:, 0]) > 2.0


def test_the_same_seed_drives_the_same_way():
    """All freedom is the generator's."""
    np.testing.assert_array_equal(drive(3, 20), drive(3, 20))


def test_open_ground_draws_it_straight_ahead_most_often():
    """The straight motion has 3 parts in 4 of the liking: 3 x 0.5 against 2 x 0.25."""
    rng = stream(0, "open")
    turns = [Wander().next(seen(np.full(32, 4.0)), rng).turn_rad for _ in range(400)]
    assert abs(np.mean(np.array(turns) == 0) - 0.75) < 0.07  # three standard deviations of 0.022


@pytest.mark.parametrize("side", [-1.0, 1.0])
def test_blocked_it_turns_to_the_roomier_side(side):
    """A wall ahead that recedes to one side."""
    depth = np.full(32, 0.4) + 0.3 * (side * CAMERA > 0)
    motion = Wander().next(seen(depth), stream(0))
    assert not motion.travels and np.sign(motion.turn_rad) == side


def test_it_keeps_turning_the_same_way_until_it_travels():
    """In a corner the roomier side changes with every turn; a robot that follows it would stay."""
    mover, rng = Wander(), stream(0)
    first = mover.next(seen(np.full(32, 0.4) + 0.3 * (CAMERA > 0)), rng)
    second = mover.next(seen(np.full(32, 0.4) + 0.3 * (CAMERA < 0)), rng)
    assert first.turn_rad > 0 and second.turn_rad > 0


def test_a_blind_robot_turns():
    """With nothing seen no travel is allowed."""
    assert not Wander().next(seen(np.full(32, np.nan)), stream(0)).travels


def test_motions_without_a_way_to_turn_are_refused():
    """Blocked, it could do nothing."""
    with pytest.raises(ConfigError, match=r"mover\.moves"):
        Wander(motions=(Motion(0.5, 0, 0), Motion(0, 0, 0.3)))

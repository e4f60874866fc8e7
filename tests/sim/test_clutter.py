"""Furniture and people."""

import numpy as np
import pytest
import shapely
from invented import EMPTY, room, world_of

from learnfilter.plan.floorplan import OPEN
from learnfilter.sim import Conditions
from learnfilter.sim.clutter import People, furnish, outline_edges


def people(phase):
    """One walker between (0, 0) and (4, 0) at 1 m/s."""
    return People(np.array([[[0.0, 0], [4, 0]]]), np.ones(1), np.array([phase]), np.zeros((1, 3)))


@pytest.mark.parametrize(("time_s", "x"), [(0, 0), (1, 1), (4, 4), (5, 3), (8, 0), (9, 1)])
def test_people_walk_to_and_fro(time_s, x):
    """There in four seconds, back in four."""
    np.testing.assert_allclose(people(0.0).at(np.array([time_s])), [[[x, 0]]], atol=1e-12)


def test_rims_surround_people():
    """The outline round a person holds the person's disc and little more."""
    disc = shapely.Point(2, 0).buffer(0.25, quad_segs=64)
    (rim,) = (shapely.Polygon(outline) for outline in people(0.5).rims(0.0))
    # a regular octagon round a disc has 1.055 times its area
    assert rim.buffer(1e-4).contains(disc)
    assert rim.area < 1.06 * np.pi * 0.25**2


def test_furniture_touches_no_wall_and_no_doorway():
    """Boxes keep clear of walls, doorways keep 0.9 m, all stay inside."""
    plan = room(8, 6, extra=[[4, 0, 4, 2.5], [4, 3.5, 4, 6]], doors=[([4, 2.5, 4, 3.5], OPEN)])
    world = world_of(plan, Conditions(furniture_per_100_m2=30, people=0))
    things = np.array([shapely.Polygon(outline) for outline in world.truth.solids])
    walls = shapely.MultiLineString([s.reshape(2, 2) for s in plan.segments[:-1]])
    assert len(things) > 5
    assert shapely.distance(things, walls).min() >= 0.03 - 1e-9
    assert shapely.distance(things, shapely.LineString([[4, 2.5], [4, 3.5]])).min() >= 0.9 - 1e-9
    assert shapely.contains(shapely.box(0, 0, 8, 6), things).all()


def test_the_number_of_things_has_the_mean_asked_for():
    """On ample floor, boxes a thing average 0.7 + 0.3 x 3; Poisson mean 4 over 200 days."""
    floor = np.stack(np.meshgrid(np.arange(2, 98, 4.0), np.arange(2, 98, 4.0)), axis=-1).reshape(-1, 2)
    none = np.empty((0, 4))
    counts = [len(furnish(floor, none, none, 4.0, np.random.default_rng(day))[0]) for day in range(200)]
    # compound Poisson: variance 4 E[boxes^2], boxes 1 with 0.7, else 2, 3 or 4 alike
    variance = 4 * (0.7 + 0.3 * (4 + 9 + 16) / 3)
    assert abs(np.mean(counts) - 4 * 1.6) < 4 * np.sqrt(variance / 200)


def test_no_thing_stands_beyond_a_wall():
    """Chairs round a place 0.3 m from a wall stay on its side."""
    wall = np.array([[0.3, -5.0, 0.3, 5.0]])
    outlines, _ = furnish(np.zeros((1, 2)), wall, np.empty((0, 4)), 60.0, np.random.default_rng(0))
    assert max(outline[:, 0].max() for outline in outlines) < 0.3


def test_an_empty_site_stays_empty():
    """No furniture and no people where none is asked for."""
    world = world_of(room(5, 5), EMPTY)
    assert (len(world.truth.solids), len(world.people.speed)) == (0, 0)


def test_outline_edges_close():
    """Each edge ends where the next begins, the last at the first."""
    edges = outline_edges(np.array([[0.0, 0], [1, 0], [0, 1]]))
    np.testing.assert_array_equal(edges[:, 2:], np.roll(edges[:, :2], -1, axis=0))

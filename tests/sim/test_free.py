"""Clearances and ways."""

import numpy as np
import shapely
from scipy.sparse import coo_array
from scipy.sparse.csgraph import dijkstra

from learnfilter.sim.free import CELL_M, clearance, free_space, way_lengths


def test_clearance_is_the_distance_between_lines():
    """Random segments, against shapely."""
    rng = np.random.default_rng(0)
    for _ in range(200):
        line, walls = rng.uniform(0, 5, 4), rng.uniform(0, 5, (3, 4))
        ours = shapely.LineString(line.reshape(2, 2))
        expected = ours.distance(shapely.MultiLineString(list(walls.reshape(-1, 2, 2))))
        np.testing.assert_allclose(clearance(*line, walls), expected, atol=1e-12)


def test_clearance_of_a_point_and_of_nothing():
    """A line of no length is a point; without segments everything is infinitely far."""
    assert clearance(3.0, 4.0, 3.0, 4.0, np.array([[0.0, 0.0, 0.0, 0.0]])) == 5.0
    assert clearance(3.0, 4.0, 5.0, 4.0, np.empty((0, 4))) == np.inf


def test_free_nodes_keep_the_radius():
    """Every free node is farther than the radius from every segment and outside solids."""
    rng = np.random.default_rng(1)
    walls = rng.uniform(0, 4, (5, 4))
    block = np.array([[1.0, 1.0], [3.0, 1.0], [3.0, 3.0], [1.0, 3.0]])
    space = free_space(walls, [block], (0.0, 0.0, 4.0, 4.0), 0.25)
    nodes = shapely.points(space.place(*np.nonzero(space.free)))
    assert shapely.distance(nodes, shapely.MultiLineString(list(walls.reshape(-1, 2, 2)))).min() > 0.25
    assert not shapely.contains(shapely.Polygon(block), nodes).any()


def test_way_lengths_are_shortest():
    """Against Dijkstra's algorithm in scipy on the same graph, built cell by cell."""
    rng = np.random.default_rng(2)
    cost = np.where(rng.random((12, 15)) < 0.25, np.inf, rng.choice([1.0, 3.0], (12, 15))).astype(np.float32)
    cost[0, 0] = 1.0
    edges = []
    for r, c in np.argwhere(np.isfinite(cost)):
        for dr, dc in [(a, b) for a in (-1, 0, 1) for b in (-1, 0, 1) if a or b]:
            nr, nc = r + dr, c + dc
            inside = 0 <= nr < 12 and 0 <= nc < 15
            if inside and np.isfinite([cost[nr, nc], cost[nr, c], cost[r, nc]]).all():
                edges.append((r * 15 + c, nr * 15 + nc, np.hypot(dr, dc) * cost[nr, nc]))
    start, end, weight = zip(*edges, strict=True)
    expected = dijkstra(coo_array((weight, (start, end)), (180, 180)), indices=0).reshape(12, 15)
    # float32 sums of some forty terms
    np.testing.assert_allclose(way_lengths(cost, 0, 0), expected, rtol=1e-5)


def test_node_and_place_are_inverse():
    """The node nearest to a node's place is that node."""
    space = free_space(np.array([[0.0, 0.0, 3.0, 2.0]]), [], (0.0, 0.0, 3.0, 2.0), 0.1)
    row, column = space.node(*space.place(np.array(7), np.array(11)))
    assert (row, column) == (7, 11)
    np.testing.assert_allclose(space.place(np.array(1), np.array(0)), [0, CELL_M])

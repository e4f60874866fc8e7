"""Rays against closed forms, integral geometry, shapely and brute force.

Formulas: polar area and mean chords as in Santalo 2004, "Integral Geometry and Geometric Probability".
"""

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.errors import ShapeError
from learnfilter.render.rays import build_scene, cast, cast_fan
from tests.oracles_rays import brute_force
from tests.render.shapes import outline, rectangle

ROOM = build_scene(rectangle(0, 0, 4, 3))
# ranges come back as float32, whose rounding is at most 6e-8 of the value
FLOAT32 = 1.2e-7


def one_point(scene, x, y, angles, max_range_m=np.inf):
    ranges, segments = cast_fan(scene, [x], [y], angles, max_range_m)
    return ranges[0], segments[0]


@pytest.mark.parametrize(
    ("x", "y", "angle", "expected"),
    [
        (1, 1, 0, 3),
        (1, 1, np.pi / 2, 2),
        (1, 1, np.pi, 1),
        (1, 1, 3 * np.pi / 2, 1),
        (1, 1, np.pi / 4, 2 * np.sqrt(2)),
        (1, 1, np.pi / 6, 2 * np.sqrt(3)),
        (1, 1, 3 * np.pi / 4, np.sqrt(2)),
        (1, 1, np.arctan2(2, 3), np.sqrt(13)),
        (2, 1.5, np.arctan2(1.5, 2), 2.5),
        (3.5, 0.25, np.radians(200), 0.25 / np.sin(np.radians(20))),
    ],
)
def test_ranges_in_a_rectangle_follow_the_closed_form(x, y, angle, expected):
    """Axis-parallel, oblique and aimed at a corner: (W - x) / cos or (H - y) / sin."""
    assert_allclose(cast(ROOM, [x], [y], [angle], np.inf)[0], expected, rtol=FLOAT32)


@pytest.mark.parametrize(
    ("x", "y", "angle_deg", "expected"),
    [
        (0, 0, 77, 2),
        (1, 0, 0, 1),
        (1, 0, 180, 3),
        (1, 0, 90, np.sqrt(3)),
        (1, 0, 60, (np.sqrt(13) - 1) / 2),
        (0.5, -0.5, 45, np.sqrt(3.5)),
    ],
)
def test_ranges_in_a_disc_follow_the_closed_form(x, y, angle_deg, expected):
    """-b + sqrt(b^2 + R^2 - p^2), the disc drawn with 20 000 sides."""
    turn = 2 * np.pi * np.arange(20_000) / 20_000
    disc = build_scene(outline(np.stack([2 * np.cos(turn), 2 * np.sin(turn)], axis=1)))
    # the polygon lies R (1 - cos(pi / N)) = 2.5e-8 inside the circle; oblique rays see twice that
    assert_allclose(one_point(disc, x, y, [np.radians(angle_deg)])[0], expected, atol=4e-7)


@pytest.mark.parametrize(("x", "y"), [(1.0, 1.0), (3.5, 0.25)])
def test_half_the_sum_of_squared_ranges_is_the_floor_area(x, y):
    """Area identity of a star-shaped room, 3600 midpoint rays."""
    step = 2 * np.pi / 3600
    ranges, _ = one_point(ROOM, x, y, (np.arange(3600) + 0.5) * step)
    # midpoint rule at this step: 1.6e-5 measured with shapely, from the four corners
    assert_allclose(0.5 * np.sum(ranges.astype(float) ** 2) * step, 12.0, atol=1e-4)


def test_mean_ray_from_the_middle_of_a_square():
    """(4 / pi) ln(1 + sqrt 2) times half the side."""
    ranges, _ = one_point(
        build_scene(rectangle(-1, -1, 1, 1)), 0, 0, 2 * np.pi * (np.arange(4000) + 0.5) / 4000
    )
    # midpoint rule: error about step^2 / 24 times the jump of the slope at four corners, below 1e-6
    assert_allclose(ranges.astype(float).mean(), 4 / np.pi * np.log(1 + np.sqrt(2)), rtol=1e-6)


def test_mean_chord_of_a_room_is_pi_area_over_perimeter():
    """Cauchy: starts uniform on the boundary, sine of the angle to the normal uniform."""
    rng, n = np.random.default_rng(4), 40_000
    along, lean = rng.uniform(0, 14, n), np.arcsin(rng.uniform(-1, 1, n))
    side = np.searchsorted([4, 7, 11], along)
    corner = np.array([(0, 0), (4, 0), (4, 3), (0, 3)])[side]
    heading = side * np.pi / 2
    s = along - np.array([0, 4, 7, 11])[side]
    inward = heading + np.pi / 2
    # started just inside, or the ray would meet its own wall
    x = corner[:, 0] + s * np.cos(heading) + 1e-9 * np.cos(inward)
    y = corner[:, 1] + s * np.sin(heading) + 1e-9 * np.sin(inward)
    chords, _ = cast(ROOM, x, y, inward + lean, np.inf)
    # standard deviation of one chord is 1.2385 m; four standard errors
    assert_allclose(chords.mean(), np.pi * 12 / 14, atol=4 * 1.2385 / np.sqrt(n))


def test_mean_ray_from_a_random_point_of_a_room():
    """Uniform point and direction in 4 x 3 m: 1.6310139 m, standard deviation 1.0768 m."""
    rng, n = np.random.default_rng(5), 40_000
    ranges, _ = cast(ROOM, rng.uniform(0, 4, n), rng.uniform(0, 3, n), rng.uniform(-np.pi, np.pi, n), np.inf)
    assert_allclose(ranges.mean(), 1.6310139, atol=4 * 1.0768 / np.sqrt(n))


def test_the_four_twins_of_a_square_see_the_same_range():
    """(dx, dy, heading) turned by 90 degrees about the middle: 1.5701274 m each."""
    x, y, angle = np.array([0.5, -0.25, -0.5, 0.25]), np.array([0.25, 0.5, -0.25, -0.5]), 0.3
    ranges, _ = cast(build_scene(rectangle(-2, -2, 2, 2)), x, y, angle + np.arange(4) * np.pi / 2, np.inf)
    assert_allclose(ranges, 1.5701274, rtol=FLOAT32)


def test_a_rectangle_turned_by_a_quarter_is_no_twin():
    """In 4 x 3 m the 180 degree image sees the same range, the 90 degree image 1.0467516 m."""
    x, y = 2 + np.array([0.5, -0.5, -0.25]), 1.5 + np.array([0.25, -0.25, 0.5])
    ranges, _ = cast(ROOM, x, y, 0.3 + np.array([0, np.pi, np.pi / 2]), np.inf)
    assert_allclose(ranges, [1.5701274, 1.5701274, 1.0467516], rtol=FLOAT32)


def test_the_mirrored_pose_sees_the_ring_in_reverse():
    """Ray 0 stays, the rest is reversed: a mirror is not a twin."""
    turn = 2 * np.pi * np.arange(8) / 8
    seen, _ = one_point(ROOM, 1.3, 0.7, 0.2 + turn)
    mirrored, _ = one_point(ROOM, 2.7, 0.7, np.pi - 0.2 + turn)
    assert_allclose(np.roll(mirrored[::-1], 1), seen, rtol=FLOAT32)


def test_a_ray_names_the_segment_it_meets():
    """Bottom, right, top, left are segments 0 to 3."""
    _, segments = one_point(ROOM, 1, 1, np.array([-1, 0, 1, 2]) * np.pi / 2)
    assert_array_equal(segments, [0, 1, 2, 3])


def test_nothing_beyond_the_longest_range_is_met():
    """The wall is 3 m away."""
    for limit, expected in ((2.999, (np.inf, -1)), (3.001, (3.0, 1))):
        range_m, segment = cast(ROOM, [1], [1], [0], limit)
        assert (range_m[0], segment[0]) == expected


def test_rays_that_start_outside_meet_the_near_side():
    """From (-3, 1) along +x the left wall is 3 m away; away from the room there is nothing."""
    assert_array_equal(cast(ROOM, [-3, -3, 50], [1, 1, 50], [0, np.pi, 0], np.inf)[0], [3, np.inf, np.inf])


def test_an_origin_astronomically_far_away_is_harmless():
    """Rounding there is larger than the room; the walk must still stay inside its arrays."""
    far = 1e17
    ranges, _ = cast(ROOM, [-far, far, 1], [1, far, -far], [0, np.pi / 4, np.pi / 2], np.inf)
    assert not np.isnan(ranges).any()


def test_an_empty_scene_stops_no_ray():
    """No segments, no ranges."""
    range_m, segment = cast(build_scene(np.zeros((0, 4))), [1.0], [2.0], [3.0], 10.0)
    assert np.isinf(range_m[0])
    assert segment[0] == -1


def test_no_ray_slips_through_the_joints_of_a_closed_outline():
    """Aimed exactly at every corner of a 97-gon from 50 points inside."""
    turn = 2 * np.pi * np.arange(97) / 97
    corners = np.stack([5 * np.cos(turn), 5 * np.sin(turn)], axis=1)
    starts = np.random.default_rng(0).uniform(-3, 3, (50, 1, 2))
    dx, dy = np.moveaxis(corners - starts, -1, 0)
    x, y = (np.broadcast_to(starts[..., i], dx.shape).ravel() for i in (0, 1))
    ranges, _ = cast(build_scene(outline(corners)), x, y, np.arctan2(dy, dx).ravel(), np.inf)
    assert_allclose(ranges, np.hypot(dx, dy).ravel(), rtol=FLOAT32)


def test_walls_on_the_borders_of_the_grid_stop_every_ray():
    """A lattice of walls 2 m apart, cells of 2 m and 1 m: brute force agrees, axis-parallel rays too."""
    lines = [(i, 0, i, 20) for i in range(0, 21, 2)] + [(0, i, 20, i) for i in range(0, 21, 2)]
    rng = np.random.default_rng(2)
    x, y = rng.uniform(0, 20, (2, 400))
    angle = np.where(np.arange(400) % 4 == 0, rng.integers(0, 4, 400) * np.pi / 2, rng.uniform(-4, 4, 400))
    expected = brute_force(lines, x, y, angle, np.inf)
    assert np.isfinite(expected).all()
    for cell_m in (1.0, 2.0):
        assert_allclose(cast(build_scene(lines, cell_m), x, y, angle, np.inf)[0], expected, rtol=FLOAT32)


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    n=st.integers(1, 60),
    cell_m=st.sampled_from([None, 0.3, 1.0, 2.0, 7.0]),
    snap_m=st.sampled_from([None, 0.5, 1.0]),
    max_range_m=st.sampled_from([2.5, np.inf]),
)
def test_random_plans_agree_with_brute_force(seed, n, cell_m, snap_m, max_range_m):
    """Free or snapped to cell borders, rays inside and outside, free or axis-parallel."""
    rng = np.random.default_rng(seed)
    lines = rng.uniform(-6, 6, (n, 4))
    if snap_m:
        lines = np.round(lines / snap_m) * snap_m
    x, y = rng.uniform(-9, 9, (2, 200))
    angle = np.where(rng.random(200) < 0.2, rng.integers(-4, 5, 200) * np.pi / 2, rng.uniform(-7, 7, 200))
    expected = brute_force(lines, x, y, angle, max_range_m)
    # float32, and rays nearly along a wall lose digits in both computations
    assert_allclose(cast(build_scene(lines, cell_m), x, y, angle, max_range_m)[0], expected, rtol=1e-6)


def test_random_rays_agree_with_shapely():
    """A general geometry library intersects the same rays with the same lines."""
    rng = np.random.default_rng(3)
    lines = np.vstack([rectangle(-6, -6, 6, 6), rng.uniform(-6, 6, (20, 4))])
    x, y, angle = *rng.uniform(-6, 6, (2, 300)), rng.uniform(-np.pi, np.pi, 300)
    ends = np.stack([x + 20 * np.cos(angle), y + 20 * np.sin(angle)], axis=1)
    rays = shapely.linestrings(np.stack([np.stack([x, y], axis=1), ends], axis=1))
    together = shapely.multilinestrings(shapely.linestrings(lines.reshape(-1, 2, 2)))
    expected = shapely.distance(shapely.points(x, y), shapely.intersection(rays, together))
    # shapely's crossing points carry rounding of about 1e-15 of the 20 m ray; float32 dominates
    assert_allclose(cast(build_scene(lines), x, y, angle, np.inf)[0], expected, rtol=1e-6)


def test_a_fan_is_its_rays_cast_one_by_one():
    """The same points and angles through the other entrance, bit for bit."""
    rng = np.random.default_rng(6)
    scene = build_scene(np.vstack([rectangle(0, 0, 9, 7), rng.uniform(0, 7, (15, 4))]))
    x, y, angles = rng.uniform(0, 7, 30), rng.uniform(0, 7, 30), rng.uniform(-4, 4, 16)
    ranges, segments = cast_fan(scene, x, y, angles, 5.0)
    expected = cast(scene, np.repeat(x, 16), np.repeat(y, 16), np.tile(angles, 30), 5.0)
    assert_array_equal(ranges.ravel(), expected[0])
    assert_array_equal(segments.ravel(), expected[1])


def test_arrays_that_disagree_are_refused():
    """Two origins, three angles."""
    with pytest.raises(ShapeError):
        cast(ROOM, [1, 2], [1, 2], [0, 0, 0], 5.0)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
@pytest.mark.parametrize("place", [0, 1, 2])
def test_rays_that_are_not_finite_are_refused(bad, place):
    """x, y or angle."""
    ray = [[1.0], [1.0], [0.0]]
    ray[place] = [bad]
    with pytest.raises(ValueError, match="finite"):
        cast(ROOM, *ray, 5.0)

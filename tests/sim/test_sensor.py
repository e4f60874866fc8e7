"""What a strip measures: geometry without faults, and faults of the size documented."""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from invented import EMPTY, NO_FAULTS, PLAIN_LIGHT, room, world_of

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.strip import Strip, even_strip
from learnfilter.plan.floorplan import OPEN, SHUT
from learnfilter.sim import Conditions, free_poses, make_plan, sense
from learnfilter.sim.clutter import People
from learnfilter.sim.light import Light
from learnfilter.sim.sensor import CAMERA, Faults, missing_chance, range_sd

AHEAD = Strip((0.0,), min_range_m=0.1, max_range_m=8.0)
WIDE = Strip(even_strip(-45, 3, 31), min_range_m=0.1, max_range_m=8.0)
# Ranges travel as float32.
FLOAT32_M = 1e-5
# sRGB is given in 8 bits: half a step.
HALF_CODE = 0.5 / 255 + 1e-6


def look(world, pose, rows=1, strip=AHEAD, faults=NO_FAULTS, seed=0):
    """Strips of a sensor that stands at a pose."""
    poses = np.tile(np.asarray(pose, float), (rows, 1))
    return sense(world, poses, np.arange(rows, dtype=float), strip, np.random.default_rng(seed), faults)


def within(share, expected, count):
    """Whether a share of `count` independent draws is within four standard errors."""
    return abs(share - expected) < 4 * np.sqrt(expected * (1 - expected) / count)


def test_without_faults_ranges_are_the_lengths_of_rays():
    """A furnished office, shut and open doors: against shapely's intersections."""
    plan = make_plan("offices", np.random.default_rng(1))
    world = world_of(plan, Conditions(people=0))
    poses = free_poses(world, np.random.default_rng(2), 10)
    strip = replace(WIDE, max_range_m=30.0)
    depth, _ = sense(world, poses, np.zeros(10), strip, np.random.default_rng(0), NO_FAULTS_NO_GLASS)
    truth = world.truth
    stops = (truth.kind < 2) | ((truth.kind == 2) & (truth.state == SHUT))
    walls = shapely.MultiLineString([s.reshape(2, 2) for s in truth.segments[stops]])
    for (x, y, heading), row in zip(poses, depth, strict=True):
        angles = heading + np.array(strip.bearings_rad)
        ends = np.stack([x + 30 * np.cos(angles), y + 30 * np.sin(angles)], axis=1)
        rays = shapely.linestrings(np.stack([np.broadcast_to([x, y], ends.shape), ends], axis=1))
        met = shapely.intersection(rays, walls)
        expected = np.where(shapely.is_empty(met), np.nan, shapely.distance(shapely.Point(x, y), met))
        np.testing.assert_allclose(row, expected, atol=FLOAT32_M)


# windows are seen through, always
NO_FAULTS_NO_GLASS = replace(NO_FAULTS, glass_through=1.0, glass_none=0.0)


def test_a_sensor_turned_on_its_mount_looks_elsewhere():
    """A turn of 90 degrees to the left that nobody declared: the strip sees what is on the left."""
    world = world_of(room(6, 4), replace(EMPTY, mount_turn_deg=90.0))
    depth, _ = look(world, [1.5, 1.0, 0.0])
    np.testing.assert_allclose(depth, [[3.0]], atol=FLOAT32_M)


def test_range_scale_stretches_ranges():
    """A sensor that reads 2 % long."""
    depth, _ = look(world_of(room(6, 4), replace(EMPTY, range_scale=1.02)), [1, 2, 0])
    np.testing.assert_allclose(depth, [[5.1]], atol=FLOAT32_M)


@pytest.mark.parametrize(
    # Nguyen, Izadi, Lovell 2012: axial 0.0012 + 0.0019 (z - 0.4)^2, and at steep incidence more
    ("range_m", "angle_deg", "expected"),
    [
        (0.4, 0, 0.0012),
        (1, 0, 0.001884),
        (2, 0, 0.006064),
        (4, 0, 0.025824),
        (2, 70, 0.006064 + 0.0008662),
        (3, 75, 0.014044 + 0.0014434),
    ],
)
def test_spread_of_range_is_the_published_one(range_m, angle_deg, expected):
    """Closed values; check sums at 70 and 75 degrees are 0.0069302 and 0.0154874 m."""
    sd = range_sd(np.array(range_m), np.radians(angle_deg), CAMERA)
    np.testing.assert_allclose(sd, expected, atol=1e-6)


def test_measured_ranges_spread_by_it():
    """Face-on at 2 m: mean 2 m and standard deviation 6.064 mm (Nguyen et al. 2012)."""
    n = 4000
    faults = replace(NO_FAULTS, sd_m=CAMERA.sd_m, sd_growth_per_m=CAMERA.sd_growth_per_m)
    depth, _ = look(world_of(room(6, 4)), [4, 2, 0], n, faults=faults)
    assert abs(depth.mean() - 2) < 4 * 0.006064 / np.sqrt(n)
    np.testing.assert_allclose(depth.std(), 0.006064, rtol=4 / np.sqrt(2 * n))


@pytest.mark.parametrize("scale", [0.0, 1.0, 2.5])
def test_the_share_of_missing_readings_is_the_one_set(scale):
    """Plain missing readings, times the condition's factor."""
    world = world_of(room(6, 4), replace(EMPTY, missing_scale=scale))
    depth, rgb = look(world, [4, 2, 0], 3000, faults=replace(NO_FAULTS, missing=0.1))
    assert within(np.isnan(depth).mean(), 0.1 * scale, 3000) or scale == np.isnan(depth).sum() == 0
    assert np.isfinite(rgb).all()


def test_dark_far_and_steep_surfaces_fail_more_often():
    """The chance grows with range, darkness and angle of incidence, each alone."""
    black, white = np.zeros(3), np.ones(3)
    chance = [
        float(missing_chance(np.array(z), np.array(angle), linear, 8.0, CAMERA))
        for z, angle, linear in [(2, 0, white), (2, 0, black), (6, 0, black), (6, 1.4, black)]
    ]
    assert chance == sorted(set(chance))


def test_bursts_drop_depth_and_colour_of_neighbouring_columns():
    """The share dropped in each column, from the chance and the geometric length of a run."""
    n, start, length = 4000, 0.02, 3.0
    faults = replace(NO_FAULTS, burst=start, burst_columns=length)
    depth, rgb = look(world_of(room(6, 4)), [3, 2, 0], n, WIDE, faults)
    dropped = np.isnan(depth)
    np.testing.assert_array_equal(dropped, np.isnan(rgb).all(axis=-1))
    # column i stands unless a run that began k columns before is longer than k
    reach = (1 - 1 / length) ** np.arange(31)
    expected = 1 - np.cumprod(1 - start * reach)
    for share, chance in zip(dropped.mean(axis=0), expected, strict=True):
        assert within(share, chance, n)


def test_a_few_readings_come_back_short():
    """Their share, and none longer than the way to the wall."""
    depth, _ = look(world_of(room(6, 4)), [2, 2, 0], 3000, faults=replace(NO_FAULTS, short=0.05))
    assert within((depth < 3.99).mean(), 0.05, 3000)
    assert depth.max() <= 4 + FLOAT32_M


def test_readings_at_an_edge_lie_between_near_and_far():
    """A column whose quarter looks past a wall's end mixes 2 m and 4 m in half of a 30 % share."""
    world = world_of(room(6, 4, extra=[[4, 0, 4, 2.005]]))
    strip = Strip(even_strip(-1, 1, 3), min_range_m=0.1, max_range_m=8.0)
    depth, _ = look(world, [2, 2, 0], 3000, strip, replace(NO_FAULTS, mixed=0.3))
    mixed = (depth[:, 1] > 2.001) & (depth[:, 1] < 3.999)
    assert within(mixed.mean(), 0.15, 3000)


def test_colour_is_seen_where_depth_ends():
    """A wall beyond maximum range has a colour and no depth; one nearer than minimum range likewise."""
    world = world_of(room(20, 4))
    for x in (2, 19.95):
        depth, rgb = look(world, [x, 2, 0])
        assert np.isnan(depth).all()
        assert np.isfinite(rgb).all()


@pytest.mark.parametrize("distance_m", [1.0, 2.0, 4.0])
def test_colour_is_finish_times_light(distance_m):
    """Face-on: (0.75 ceiling + 0.12 / d^2 lamp) x level x linear finish, encoded by IEC 61966-2-1."""
    light = Light(np.array([0.9, 0.8, 0.7]), PLAIN_LIGHT.waves, uneven=0.0)
    world = world_of(room(6, 4, srgb=(0.8, 0.5, 0.2)), light=light)
    _, rgb = look(world, [6 - distance_m, 2, 0])
    linear = ((np.array([0.8, 0.5, 0.2]) + 0.055) / 1.055) ** 2.4 * light.rgb
    expected = 1.055 * (linear * (0.75 + 0.12 / distance_m**2)) ** (1 / 2.4) - 0.055
    np.testing.assert_allclose(rgb[0, 0], expected, atol=HALF_CODE)


def test_colour_noise_has_the_spread_set():
    """In linear light, constant and proportional parts together."""
    n = 3000
    faults = replace(NO_FAULTS, colour_sd=0.01, colour_sd_share=0.02)
    _, rgb = look(world_of(room(6, 4, srgb=(0.5, 0.5, 0.5))), [4, 2, 0], n, faults=faults)
    linear = srgb_to_linear(rgb[:, 0])
    # rounding to 8 bits adds less than 0.001 here
    expected = 0.01 + 0.02 * 0.2140411 * 0.78
    np.testing.assert_allclose(linear.std(axis=0), expected, rtol=4 / np.sqrt(2 * n) + 0.02)


def test_a_person_stands_before_the_wall():
    """A disc of 0.25 m ahead; once within arm's reach the person steps aside."""
    ends = np.array([[[4.0, 2.0], [2.4, 2.0]]])
    world = replace(
        world_of(room(6, 4)), people=People(ends, np.array([1.6]), np.zeros(1), np.full((1, 3), 0.5))
    )
    depth, _ = look(world, [2, 2, 0], rows=2)
    np.testing.assert_allclose(depth[:, 0], [1.75, 4.0], atol=FLOAT32_M)


def test_glass_lets_most_rays_pass_and_loses_some():
    """A pane 1 m ahead, a wall at 4 m: shares of what comes back."""
    n = 3000
    world = world_of(room(6, 4, extra=[[3, 0, 3, 4]]))
    kind = world.truth.kind.copy()
    kind[4] = 3
    world = replace(world, truth=replace(world.truth, kind=kind))
    faults = replace(NO_FAULTS, glass_through=0.5, glass_none=0.3)
    depth, _ = look(world, [2, 2, 0], n, faults=faults)
    shares = [np.isclose(depth, 4).mean(), np.isnan(depth).mean(), np.isclose(depth, 1).mean()]
    assert all(within(*pair, n) for pair in zip(shares, (0.5, 0.3, 0.2), strict=True))


def test_rays_pass_open_doors_and_end_at_shut_ones():
    """The same doorway in both states."""
    line = [3, 1, 3, 3]
    ranges = [
        look(world_of(room(6, 4, extra=[[3, 0, 3, 1], [3, 3, 3, 4]], doors=[(line, state)])), [1, 2, 0])[0]
        for state in (OPEN, SHUT)
    ]
    np.testing.assert_allclose(np.ravel(ranges), [5, 2], atol=FLOAT32_M)


def test_blind_columns_measure_nothing():
    """Neither depth nor colour."""
    depth, rgb = look(world_of(room(6, 4)), [3, 2, 0], strip=replace(WIDE, blind=(0, 7)))
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(depth[0])), [0, 7])
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(rgb[0]).any(axis=-1)), [0, 7])


def test_a_scanner_errs_otherwise_than_a_camera():
    """Without colour the spread at 6 m is a scanner's 15 mm, not a depth camera's 61 mm."""
    world = world_of(room(8, 4))
    spreads = []
    for has_colour in (True, False):
        strip = replace(AHEAD, has_colour=has_colour)
        depth, _ = look(world, [2, 2, 0], 3000, strip, faults=None)
        ordinary = depth[depth > 5.7]
        spreads.append(ordinary.std())
    np.testing.assert_allclose(spreads, [0.0608, 0.015], rtol=0.06)


def test_faults_are_shares():
    """The usual faults leave most readings alone."""
    depth, _ = look(world_of(room(6, 4)), [3, 2, 0.3], 500, WIDE, Faults())
    clean, _ = look(world_of(room(6, 4)), [3, 2, 0.3], 1, WIDE)
    assert 0.85 < (np.abs(depth - clean) < 0.1).mean() < 0.99

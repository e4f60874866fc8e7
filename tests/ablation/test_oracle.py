"""The oracle: probabilities that add up, knowledge that helps, and no more than anyone could know."""

import math
from dataclasses import replace

import numpy as np
import pytest

from learnfilter.ablation.known import FINER
from learnfilter.ablation.oracle import Belief, beliefs, common_lattice, move, sum_to
from learnfilter.ablation.sensing import strip_log_likelihood
from learnfilter.app.knowing import know, oracle_trace
from learnfilter.core.grid import PoseGrid
from learnfilter.core.poses import between, compose, wrap
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.course import Ground, course_of
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import trace
from learnfilter.plan.floorplan import WINDOW, Finish
from learnfilter.render import grid_for, render_site
from learnfilter.sim import Conditions, build_world, rehearse
from learnfilter.sim.families import make_plan
from learnfilter.sim.sensor import sense
from learnfilter.training.analytic import fit_analytic, make_blend
from tests.sim.invented import EMPTY, NO_FAULTS, room, world_of

CAMERA = Strip(even_strip(-43.59375, 2.8125, 32), min_range_m=0.15, max_range_m=6.0)
SCANNER = replace(CAMERA, has_colour=False)


def course_on(drive, plan, headings=32):
    site = render_site(
        plan, lay_on_ring(drive.strip, headings, 128 // headings), grid_for(plan, headings, 0.25),
        robot_radius_m=0.25, max_range_m=6.0,
    )  # fmt: skip
    return site, course_of(drive, site, 0.2, 0.2)


def driven(world, robot, strip, faults=None, seed=0):
    """The drive of a robot along true poses [t 3] with perfect wheels."""
    robot = np.asarray(robot, float)
    rng, time_s = np.random.default_rng(seed), np.arange(len(robot), dtype=float)
    depth, rgb = sense(world, compose(robot, strip.mount), time_s, strip, rng, faults)
    odometry = np.vstack([np.zeros(3), between(robot[:-1], robot[1:])])
    return Drive(
        time_s, odometry, depth, rgb if strip.has_colour else None, world.on_plan(robot), strip, "by hand"
    )


def known_of(world, drive):
    site, course = course_on(drive, world.plan)
    return know(world, drive, course, site.grid), course, site.grid


def pose_index(grid, pose):
    """[1 3] heading, row and column of a pose [3]."""
    return np.array([[grid.heading_of(pose[2]), *grid.cell_of(pose[0], pose[1])]])


def painted(plan):
    """The same room with its first wall blue instead of yellow."""
    finishes = (Finish("yellow", (0.9, 0.8, 0.2)), Finish("blue", (0.2, 0.3, 0.8)))
    return replace(plan, finishes=finishes, finish=np.where(np.arange(len(plan.finish)) == 0, 1, 0))


def test_fine_mass_is_summed_to_the_common_bin_and_shared_on_its_border():
    """Bin h owns fine bins 4h - 1 to 4h + 1 whole and half of 4h - 2 and 4h + 2; four cells a side."""
    grid = PoseGrid(8, 3, 3, 0.25, 0.0, 0.0)
    common = common_lattice(grid, np.ones((3, 3), bool))
    headings = np.array([31, 0, 1, 2, 30])  # the first three in bin 0, then half each of 0 and 1, of 7 and 0
    poses = np.stack([headings, np.full(5, 7), np.full(5, 8)], axis=1)
    expected = np.zeros((8, 3, 3))
    expected[[0, 1, 7], 1, 2] = [0.1 + 0.2 + 0.3 + 0.15 / 2 + 0.25 / 2, 0.15 / 2, 0.25 / 2]
    summed = sum_to(Belief(poses, np.array([0.1, 0.2, 0.3, 0.15, 0.25])), common)
    np.testing.assert_allclose(summed, expected, atol=1e-15)


def test_mass_in_a_cell_that_is_not_live_counts_for_the_nearest_live_one():
    """As the true pose does, or nobody could be right there."""
    live = np.zeros((3, 4), bool)
    live[1, [0, 3]] = True
    common = common_lattice(PoseGrid(8, 3, 4, 0.25, 0.0, 0.0), live)
    np.testing.assert_array_equal(common.stands_for[1], [4, 4, 7, 7])


@pytest.mark.parametrize(("y", "conditions"), [(1.0, {}), (2.6, {"missing_scale": 3.0, "range_scale": 1.1})])
def test_the_density_of_a_range_adds_up_to_one(y, conditions):
    """One column of a scanner that looks at a wall: readings over 5 mm bins, and none at all."""
    strip = Strip((0.0,), 0.1, 6.0, has_colour=False)
    world = world_of(room(6, 5), replace(EMPTY, **conditions))
    robot = [[3.0, y, np.pi / 2]]
    known, course, _ = known_of(world, driven(world, robot, strip))
    at = pose_index(known.grid, course.poses[0])
    edges = np.arange(0.1, 6.0, 0.005)
    densities = [
        math.exp(strip_log_likelihood(known._replace(depth_m=np.array([[z]])), 0, at)[0])
        for z in (*edges, np.nan)
    ]
    # the bins are coarser than the steepest spread there is, 6 mm; Laplace's integral is off by as much
    assert sum(densities[:-1]) * 0.005 + densities[-1] == pytest.approx(1.0, abs=0.01)


def test_the_spread_of_range_is_the_published_one():
    """0.0012 + 0.0019 (z - 0.4)^2 at z = 2 m, face on: 6.064 mm (Nguyen, Izadi, Lovell 2012)."""
    world = world_of(room(6, 5))
    known, _, _ = known_of(world, driven(world, [[3.0, 2.0, 0.0]], CAMERA))
    node = round(2.0 / known.faults.range_step_m)
    assert known.faults.spread_m[node, -1] == pytest.approx(0.006064, abs=1e-6)


def test_the_finer_lattice_nests_in_the_common_one_though_the_plan_is_too_large():
    """A true pose lies in the fine cell that is part of the common cell of the pose on the plan."""
    world = world_of(room(6, 5), replace(EMPTY, plan_scale=1.1))
    rng = np.random.default_rng(0)
    robot = np.column_stack([rng.uniform(1, 5, 50), rng.uniform(1, 4, 50), rng.uniform(-3, 3, 50)])
    known, _, common = known_of(world, driven(world, robot, SCANNER))
    fine = np.stack(known.grid.cell_of(robot[:, 0], robot[:, 1]))
    on_plan = world.on_plan(robot)
    np.testing.assert_array_equal(fine // FINER, common.cell_of(on_plan[:, 0], on_plan[:, 1]))


def test_a_motion_moves_mean_and_variance_as_measured():
    """From one pose: 0.30 m ahead, 0.05 m left, a turn of 0.3 rad, spreads 0.05 m and 0.05 rad."""
    world = world_of(room(8, 8))
    known, _, _ = known_of(world, driven(world, [[4.0, 4.0, 0.0]], SCANNER))
    known = known._replace(motion=np.array([[0.3, 0.05, 0.3]]), spread=np.array([[0.05, 0.05]]))
    begin = np.array([[0, 70, 70]])
    after = move(Belief(begin, np.ones(1)), known, 0)
    steps = np.array([known.grid.heading_step_rad, known.grid.cell_m, known.grid.cell_m])
    moved = wrap((after.poses - begin) * [steps[0], 0, 0])[:, 0], *((after.poses - begin) * steps).T[1:]
    mean = [after.mass @ axis for axis in moved]
    variance = [after.mass @ axis**2 - m * m for axis, m in zip(moved, mean, strict=True)]
    np.testing.assert_allclose(mean, [0.3, 0.05, 0.3], atol=1e-5)  # tails beyond four sigma are cut off
    np.testing.assert_allclose(np.sqrt(variance), 0.05, rtol=0.01)


def test_mass_does_not_pass_a_wall():
    """Through a wall of no thickness, with room for the robot behind it, 0.7 m on."""
    world = world_of(room(8, 4, extra=([4, 0, 4, 4],)))
    known, _, _ = known_of(world, driven(world, [[2.0, 2.0, 0.0]], SCANNER))
    begin = pose_index(known.grid, [3.7, 2.0, 0.0])
    known = known._replace(motion=np.array([[0.6, 0.0, 0.0]]), spread=np.array([[0.08, 0.01]]))
    after = move(Belief(np.vstack([begin, begin - [0, 0, 20]]), np.array([0.5, 0.5])), known, 0)
    assert known.grid.x_centres()[after.poses[:, 2]].max() < 4.0


@pytest.fixture(scope="module")
def twins():
    """A square room without colour and a short drive in it."""
    world = world_of(room(4, 4))
    return world, driven(world, [[1.3, 0.9, 0.4], [1.6, 1.0, 0.5]], SCANNER)


def test_a_quarter_turn_of_a_square_room_changes_nothing(twins):
    """The belief is its own image under (x, y, heading) -> (-y, x, heading + 90 degrees)."""
    known, _, grid = known_of(*twins)
    belief = sum_to(list(beliefs(known, 2))[-1], common_lattice(grid, np.ones(grid.shape[1:], bool)))
    turned = np.roll(np.rot90(belief, -1, axes=(1, 2)), grid.headings // 4, axis=0)
    # ranges are float32: twins differ by 1e-7 m, which fifty sharp columns make some 1e-4 of their mass
    np.testing.assert_allclose(turned, belief, atol=1e-3)


def test_where_four_poses_look_alike_nobody_is_better_than_ln_4(twins):
    """Nats of the true pose in a fourfold room, whatever is known of the sensor; 1e-3 as above."""
    world, drive = twins
    site, course = course_on(drive, world.plan)
    seen = oracle_trace(world, drive, course, site.grid)
    assert -seen.log_truth.max() >= math.log(4) - 1e-3


@pytest.mark.parametrize(
    ("conditions", "mount"),
    [
        ({}, (0.0, 0.0, 0.0)),
        ({}, (0.2, 0.1, 0.5)),
        ({"mount_turn_deg": 5.0}, (0.0, 0.0, 0.0)),
        ({"range_scale": 1.1}, (0.0, 0.0, 0.0)),
        ({"plan_scale": 1.1}, (0.0, 0.0, 0.0)),
        ({"light_level": 0.3, "people": 3}, (0.0, 0.0, 0.0)),
    ],
)
def test_one_coloured_wall_tells_where_the_robot_is(conditions, mount):
    """Without a fault of sensor or wheels, three strips leave one pose, however else the world differs."""
    world = build_world(painted(room(5, 5)), np.random.default_rng(4), replace(EMPTY, **conditions))
    robot = [[1.4, 1.7, -0.9], [1.6, 1.5, -0.6], [1.9, 1.4, -0.2]]
    drive = driven(world, robot, replace(CAMERA, mount=mount), NO_FAULTS)
    site, course = course_on(drive, world.plan)
    seen = oracle_trace(world, drive, course, site.grid)
    gap = seen.estimate[-1] - course.poses[-1]
    # a common cell is 0.25 m wide, a bin 11 degrees: the mean of the mass is well inside the true one
    assert np.hypot(*gap[:2]) < 0.15 and abs(wrap(gap[2])) < math.radians(6) and seen.mass[-1] > 0.99


@pytest.mark.parametrize("what", ["people", "range", "glass"])
def test_what_is_known_explains_the_strip_better(what):
    """At the true pose, knowing of people, of a wrong scale or of glass is worth nats."""
    conditions = {"people": {"people": 8}, "range": {"range_scale": 1.1}, "glass": {}}[what]
    plan = room(6, 6, extra=([4, 0, 4, 6],))
    pane = replace(plan, kind=np.where(np.arange(len(plan.kind)) == 4, WINDOW, plan.kind))
    world = build_world(pane, np.random.default_rng(2), replace(EMPTY, **conditions))
    known, course, _ = known_of(world, driven(world, [[2.0, 2.0, 0.7]], CAMERA))
    things = known.things
    ignorant = {
        "people": known._replace(things=things._replace(discs=things.discs[:, :0])),
        "range": known._replace(faults=known.faults._replace(range_scale=1.0)),
        "glass": known._replace(
            things=things._replace(solid=np.vstack([things.solid, things.glass]), glass=things.glass[:0])
        ),
    }[what]
    at = pose_index(known.grid, course.poses[0])
    told, untold = (strip_log_likelihood(k, 0, at)[0] for k in (known, ignorant))
    assert told > untold + 5


def test_the_oracle_beats_a_tuned_blend_on_rehearsed_drives():
    """Four small sites, three strips each: fewer nats than a blend that was fitted to these very drives."""
    families, conditions = ("offices", "partitions", "hall", "aisles"), Conditions()
    worlds, drives, grounds = [], [], []
    for family in families:
        plan = make_plan(family, stream(1, family), 8.0, 8.0, name=family)
        worlds.append(build_world(plan, stream(1, family, "world"), conditions))
        drives.append(rehearse(worlds[-1], CAMERA, stream(1, family, "drive"), 6, family))
        site, course = course_on(drives[-1], plan)
        grounds.append(Ground(site, (course,)))
    blend = make_blend("beam+colour", grounds[0].site.layout, fit_analytic(grounds, 6.0, stream(1, "fit")))
    theirs, ours = [], []
    for world, drive, (site, (course,), _) in zip(worlds, drives, grounds, strict=True):
        theirs.append(trace(blend, MotionModel(), site, course, 1e-4, 3).log_truth[-1])
        ours.append(oracle_trace(world, drive, course, site.grid, 3).log_truth[-1])
    assert np.mean(ours) > np.mean(theirs)

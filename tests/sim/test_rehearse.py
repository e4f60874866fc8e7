"""Rehearsed drives: the same from the same seed, and made as declared."""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from invented import EMPTY, room, world_of

from learnfilter.core.poses import between
from learnfilter.core.strip import Strip, even_strip
from learnfilter.sim import FAMILIES, Conditions, rehearse, rehearse_site

STRIP = Strip(even_strip(-43.59375, 2.8125, 32), min_range_m=0.15, max_range_m=6.0)


def content(seed=1, family="offices", conditions=None, rows=12, **options):
    """Every byte a site and its drives hold."""
    plan, drives, _ = rehearse_site(seed, family, conditions or Conditions(), STRIP, rows, 2, **options)
    arrays = [a for d in drives for a in (d.time_s, d.odometry, d.depth_m, d.rgb, d.reference)]
    return plan.content_hash(), *(array.tobytes() for array in arrays)


@pytest.mark.parametrize("family", FAMILIES)
def test_the_same_seed_gives_the_same_bytes(family):
    """Plan and drives, byte for byte."""
    assert content(family=family) == content(family=family)


@pytest.mark.parametrize("other", [{"seed": 2}, {"index": 1}, {"family": "hall"}])
def test_another_seed_index_or_family_gives_another_site(other):
    """Plan and drives all differ."""
    assert not set(content()) & set(content(**other))


def test_two_drives_on_a_site_differ():
    """The site is one, the days are two."""
    plan, (first, second), _ = rehearse_site(1, "aisles", Conditions(), STRIP, 12, 2)
    assert first.site == second.site == plan.name
    assert first.name != second.name
    assert not np.array_equal(first.reference, second.reference)


def test_conditions_leave_the_layout_alone():
    """Sites can be paired over conditions; unseen finishes change colours only."""
    usual, changed = (
        rehearse_site(1, "hall", conditions, STRIP, 2, 1).plan
        for conditions in (Conditions(), Conditions(finishes="unseen", plan_scale=1.1, people=4))
    )
    np.testing.assert_array_equal(usual.segments, changed.segments)


@pytest.mark.parametrize(
    ("asked", "expected"), [((12, 12), (18, 8)), ((20, 15.2), (30, 10.1)), ((40, 9), (40, 8))]
)
def test_an_unseen_layout_has_other_proportions(asked, expected):
    """3/2 of the width, 2/3 of the depth, in whole decimetres from 8 to 40 m."""
    plan = rehearse_site(1, "offices", replace(EMPTY, layout="unseen"), STRIP, 1, 0, *asked).plan
    np.testing.assert_allclose(plan.bounds, (0, 0, *expected), atol=1e-9)  # sums of decimetres


def test_an_unseen_layout_is_drawn_from_other_seeds():
    """At a size that sites can have no wider and no less deep, the layout differs all the same."""
    usual, unseen = (
        rehearse_site(1, "offices", replace(EMPTY, layout=layout), STRIP, 1, 0, 40, 8).plan
        for layout in ("usual", "unseen")
    )
    assert usual.bounds == unseen.bounds
    assert not np.array_equal(usual.segments[:50], unseen.segments[:50])


def test_an_unseen_family_stands_in_for_any_other():
    """The same slanted walls as the family itself would have, but other ones for each name and index."""
    sites = [
        rehearse_site(1, family, replace(EMPTY, family="unseen"), STRIP, 1, 0, index=index).plan
        for family in ("offices", "hall")
        for index in range(2)
    ]
    for plan in sites:
        dx, dy = (plan.segments[:, 2:] - plan.segments[:, :2]).T
        slanted = (dx != 0) & (dy != 0)
        np.testing.assert_allclose(abs(dy[slanted] / dx[slanted]), 4 / 3)
        assert slanted.any()
    assert len({plan.content_hash() for plan in sites}) == len(sites)
    assert len({plan.name for plan in sites}) == len(sites)


def test_every_drive_comes_with_its_world():
    """The robot keeps its radius from all that stood there that day, and would not have on the other."""
    _, drives, worlds = rehearse_site(1, "hall", Conditions(20.0), STRIP, 60, 2)
    least = np.empty((2, 2))
    for i, world in enumerate(worlds):
        things = shapely.union_all(shapely.linestrings(world.obstacles.reshape(-1, 2, 2)))
        for j, drive in enumerate(drives):
            least[i, j] = shapely.distance(shapely.points(drive.reference[:, :2]), things).min()
    assert np.diag(least).min() >= 0.25 - 1e-9  # rounding
    assert max(least[0, 1], least[1, 0]) < 0.25


def test_a_share_of_plans_names_no_finishes():
    """A fifth by default: 40 sites, four standard errors of a share of 0.2 are 0.25."""
    bare = [
        not rehearse_site(5, "hall", EMPTY, STRIP, 1, 0, 8, 8, index=i).plan.has_finishes for i in range(40)
    ]
    assert 0 < np.mean(bare) < 0.45


def test_without_noise_odometry_is_the_motion_of_the_reference():
    """Reference poses and odometry tell of one drive."""
    quiet = replace(EMPTY, odometry_noise_scale=0.0)
    drive = rehearse(world_of(room(6, 5), quiet), STRIP, np.random.default_rng(0), 30)
    expected = between(drive.reference[:-1], drive.reference[1:])
    np.testing.assert_allclose(drive.odometry[1:], expected, atol=1e-12)


def test_a_strip_mounted_backwards_sees_what_is_behind():
    """One column, 0.1 m behind the robot's centre, looking back: range to the wall behind it."""
    strip = Strip((0.0,), 0.1, 9.0, has_colour=False, mount=(-0.1, 0.0, np.pi))
    drive = rehearse(world_of(room(6, 5), EMPTY), strip, np.random.default_rng(0), 40)
    x, y, heading = drive.reference.T
    ux, uy = -np.cos(heading), -np.sin(heading)
    expected = np.minimum(np.where(ux > 0, 6 - x, -x) / ux, np.where(uy > 0, 5 - y, -y) / uy) - 0.1
    # a scanner spreads by 15 mm; a few readings are short
    assert np.nanmedian(np.abs(drive.depth_m[:, 0] - expected)) < 0.03
    assert drive.rgb is None


def test_a_parked_robot_measures_without_moving():
    """Two seconds at ten strips a second come first: no motion, no odometry, noise anew each time."""
    world = world_of(room(6, 5), replace(EMPTY, parked_s=2.0, parked_rate_hz=10.0))
    drive = rehearse(world, STRIP, np.random.default_rng(0), 10)
    assert len(drive) == 30
    np.testing.assert_array_equal(drive.odometry[:21], np.zeros((21, 3)))
    np.testing.assert_allclose(np.diff(drive.time_s[:21]), 0.1)
    assert not np.array_equal(drive.depth_m[0], drive.depth_m[1], equal_nan=True)


def test_time_increases():
    """As drive tables demand."""
    _, (drive,), _ = rehearse_site(3, "partitions", Conditions(parked_s=1.0), STRIP, 20, 1)
    assert np.diff(drive.time_s).min() > 0

"""Marker advice, against surveys of sites painted in every way."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import ConfigError
from learnfilter.core.seeds import stream
from learnfilter.survey import Marker, RingComparison, advise, contrasting, paint, survey_site
from learnfilter.survey.markers import _Painting
from tests.survey.rooms import plan_of, room

WIDE = RingComparison()
RED = (0.8, 0.08, 0.08)


def located(site):
    return survey_site(site, WIDE.of(site), budget=96, most_groups=0, rng=stream(0, "survey")).located_share


def advice(name, count=1):
    site = room(name)
    found = survey_site(site, WIDE.of(site), budget=96, most_groups=0, rng=stream(0, "survey"))
    return site, found, advise(found, site, plan_of(name), count, WIDE.nats_a_column(site))


@pytest.mark.parametrize("name", ["square_room", "oblong_room"])
def test_the_first_stretch_is_as_good_as_the_best_of_all(name):
    """Every metre of wall painted in turn, each time surveyed anew: the advice wins nine tenths of it."""
    site, _, (first,) = advice(name)
    corners = np.array(
        [[0, 0], [4, 0], [4, 4 if name == "square_room" else 3], [0, 4 if name == "square_room" else 3]]
    )
    outcomes = []
    for a, b in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        ends = np.linspace(a, b, int(np.abs(b - a).sum()) + 1)
        for p, q in pairwise(ends):
            outcomes.append(located(paint(site, [Marker((*p, *q), 0, 0.0)], RED)))
    before = located(site)
    assert located(paint(site, [first], RED)) - before >= 0.9 * (max(outcomes) - before)


def test_the_estimate_is_near_a_new_survey_s_number():
    """Links are kept, not searched again, and columns count alike: good to a fifth of the gain."""
    site, found, markers = advice("square_room", 2)
    after = located(paint(site, markers, RED))
    assert markers[-1].located_share == pytest.approx(after, abs=0.2 * (after - found.located_share) + 0.02)


def test_each_marker_helps():
    """Greedy choice: the located share grows with every one."""
    _, found, markers = advice("square_room", 4)
    shares = [found.located_share, *(marker.located_share for marker in markers)]
    assert len(markers) == 4 and (np.diff(shares) > 0).all()


def test_a_site_without_look_alikes_needs_no_paint():
    """All round, with a sharp sensor, the room with the red wall is unmistakable."""
    site = room("square_room_red_wall", 128)
    sharp = RingComparison(spread_m=0.03, growth_per_m=0.0, independent_rad=1e-6)
    found = survey_site(site, sharp.of(site), budget=40, rng=stream(0))
    assert advise(found, site, plan_of("square_room_red_wall"), 3, sharp.nats_a_column(site)) == ()


def test_paint_changes_only_the_columns_that_see_it():
    """The south wall's second metre, seen from the rays that end on it, by arithmetic."""
    site = room("square_room")
    painted = paint(site, [Marker((1, 0, 2, 0), 0, 0.0)], RED)
    angle = site.layout.ring_angles()
    x = site.grid.x_centres()[site.cells[:, 1]][:, None] + site.range_m * np.cos(angle)
    y = site.grid.y_centres()[site.cells[:, 0]][:, None] + site.range_m * np.sin(angle)
    expected = (np.abs(y) < 1e-4) & (x > 1) & (x < 2)
    np.testing.assert_array_equal(painted.finish == len(site.palette), expected)
    np.testing.assert_allclose(painted.palette[-1], srgb_to_linear(RED), rtol=1e-6)
    assert painted.key != site.key and painted.range_m is site.range_m


def test_only_the_left_face_is_painted():
    """The same stretch drawn the other way round faces out of the room."""
    site = room("square_room")
    assert (paint(site, [Marker((2, 0, 1, 0), 0, 0.0)], RED).finish == site.finish).all()


def test_the_paint_differs_from_every_finish():
    """White walls: not yellow, which differs in blue alone.  A red wall: not red."""
    assert contrasting(room("square_room"))[0] != "yellow"
    assert contrasting(room("square_room_red_wall"))[0] not in ("red", "yellow")


def test_a_sensor_without_colour_is_told_so():
    """Paint would tell it nothing."""
    with pytest.raises(ConfigError, match="paint"):
        site, found, _ = advice("oblong_room")
        advise(found, site, plan_of("oblong_room"), 1, 0.0)


def test_paint_helps_where_the_plan_knows_no_other_colour():
    """Evidence comes from the strips that show the paint; bare wall says nothing."""
    bare = replace(room("square_room"), finish=np.full_like(room("square_room").finish, -1))
    bare = replace(bare, palette=np.zeros((0, 3), np.float32))
    painted = paint(bare, [Marker((1, 0, 2, 0), 0, 0.0)], RED)
    assert located(painted) > located(bare) + 0.02


def test_changes_add_up_to_what_painting_does():
    """For every face, painted in turn: the columns that tell afterwards less those that told before."""
    rng = stream(4, "painting")
    own, other = rng.integers(-1, 4, (2, 6, 10))  # four faces: many columns where both see the same one
    nothing = np.zeros((6, 10), bool)
    painting = _Painting(own, other, rng.random((6, 10)) < 0.7, nothing, nothing).painted(2)
    link, face, change = painting.changes()
    for number in range(4):
        expected = painting.painted(number).told().sum(1) - painting.told().sum(1).astype(int)
        found = np.bincount(link[face == number], change[face == number], minlength=6)
        np.testing.assert_array_equal(found, expected)

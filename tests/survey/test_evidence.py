"""The built-in ring comparison, against plain loops and what its words say."""

import numpy as np
import pytest

from learnfilter.core.errors import ConfigError
from learnfilter.survey import RingComparison
from learnfilter.survey.views import predicted_strips
from tests.survey.rooms import room

SHARP = RingComparison(spread_m=0.02, growth_per_m=0.0, independent_rad=1e-6)


def strip_at(site, cell, heading):
    return predicted_strips(site, np.array([cell]), np.array([heading]))


def test_the_predicted_strip_turns_with_the_robot():
    """From the middle cell of a 4 x 4 m room a quarter turn shows the same ranges."""
    site = room("square_room")
    cell = int(site.index_of()[9, 9])
    depth, _ = predicted_strips(site, np.array([cell, cell]), np.array([0, 8]))
    x, y = site.grid.x_centres()[9], site.grid.y_centres()[9]
    forward = site.layout.strip_bearings()
    # the wall ahead is at 4 - x (heading 0) and 4 - y (heading 8 of 32)
    np.testing.assert_allclose((depth[0] * np.cos(forward)).max(), 4 - x, atol=1e-5)  # float32 ranges
    np.testing.assert_allclose((depth[1] * np.cos(forward)).max(), 4 - y, atol=1e-5)


def test_no_pose_agrees_better_than_the_true_one():
    """A strip without noise is most likely where it was taken."""
    site = room("oblong_room")
    nats = RingComparison().of(site)(*strip_at(site, 37, 5))[0]
    assert nats.max() <= nats[37, 5] + 1e-4  # float32 sums of 32 columns


def test_evidence_is_the_exponent_times_the_sum_over_columns():
    """Between two poses, by a plain loop in float64 with the formula of the class's docstring."""
    site, comparison = room("square_room_red_wall"), RingComparison()
    depth, rgb = strip_at(site, 20, 3)
    nats = comparison.of(site)(depth, rgb)[0]

    def loop(cell, heading):
        expected, colour = (a[0] for a in strip_at(site, cell, heading))
        total = 0.0
        for w in range(site.layout.columns):
            spread = np.hypot(0.1 + 0.02 * expected[w], 0.25 / np.sqrt(12))
            total += np.log(0.1 + 0.9 * np.exp(-0.5 * ((depth[0, w] - expected[w]) / spread) ** 2))
            square = ((np.log(rgb[0, w] + 0.02) - np.log(colour[w] + 0.02)) ** 2).sum() / 0.35**2
            total += np.log(0.2 + 0.8 * np.exp(-0.5 * square))
        return total * 2.8125 / 15

    expected = loop(20, 3) - loop(90, 17)
    # expected ranges are rounded to nodes 0.03 m apart at zero, 0.2 m at 6 m: up to half of that off
    assert nats[20, 3] - nats[90, 17] == pytest.approx(expected, abs=0.15)


def test_missing_columns_give_no_evidence_where_the_layout_has_none():
    """A strip of blind columns alone leaves every pose alike."""
    site = room("square_room")
    depth, rgb = strip_at(site, 0, 0)
    nats = RingComparison().of(site)(np.full_like(depth, np.nan), np.full_like(rgb, np.nan))
    assert np.ptp(nats) < 1e-5  # in a room where every ray ends nothing came back is a stray everywhere


def test_colour_decides_only_where_it_is_measured():
    """Without colour the red wall is a wall like the others: the quarter-turned pose looks the same."""
    site = room("square_room_red_wall")
    r, c = 5, 7
    here, there = site.index_of()[r, c], site.index_of()[c, 17 - r]  # a quarter turn about the middle
    depth, rgb = strip_at(site, here, 24)  # looks at the red south wall
    with_colour = SHARP.of(site)(depth, rgb)[0]
    without = SHARP.of(site)(depth, np.full_like(rgb, np.nan))[0]
    assert without[here, 24] - without[there, 0] == pytest.approx(0, abs=1e-3)  # float32 sums
    assert with_colour[here, 24] - with_colour[there, 0] > 5


def test_shares_out_of_range_are_refused():
    """A share of one would leave no reading that agrees."""
    with pytest.raises(ConfigError):
        RingComparison(stray_share=1.0)

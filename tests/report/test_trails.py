"""Trails, patches and states as SVG: places are true, and each mark has its meaning in the legend."""

import re
from dataclasses import replace

import numpy as np
import pytest

from learnfilter.report import Timeline
from learnfilter.report.timeline import LEFT, RIGHT, timeline
from learnfilter.report.trails import trail_map
from tests.report.samples import SamplePatch, sample_timeline, sample_trail, sample_trails

STYLES = {"matcher": 0, "beam": 1}


def words(made: str) -> list[str]:
    """Entries of all legends."""
    return re.findall(r"</svg> ([^<]*)</li>", made)


def test_a_trail_runs_through_its_poses_and_breaks_where_one_is_missing(plan):
    """The third of six is NaN: two pieces, the first from (0.5, 2) to (1.1, 2)."""
    trail = sample_trail()
    trail.pose[2] = np.nan
    made = trail_map(replace(sample_trails(plan, "matcher"), trails=(trail,)), STYLES)
    path = re.search(r'class="line" d="([^"]*)" stroke-dasharray="none"', made).group(1)
    assert path.startswith("M0.50 2.00L1.10 2.00M2.30 2.00")


def test_a_patch_is_the_square_about_its_centre(plan):
    """Half a metre about (1.25, 1.25)."""
    drawn = replace(sample_trails(plan, "matcher"), patches=(SamplePatch("gone", 1.25, 1.25),))
    assert 'class="patch-gone" d="M1.00 1.00h0.50v0.50h-0.50Z"' in trail_map(drawn, STYLES)


def test_the_legend_of_trails_names_what_occurs_and_nothing_else(plan):
    """Without losses, patches and reference their marks are not explained either."""
    whole = trail_map(sample_trails(plan, "matcher", "beam"), STYLES)
    assert words(whole)[:7] == [
        "matcher", "beam", "reference pose", "locked here", "estimate while lost",
        "not as drawn: looked through", "something new here",
    ]  # fmt: skip
    bare = replace(sample_trails(plan, "matcher", lost=0), reference=None, patches=())
    assert words(trail_map(bare, STYLES))[:3] == ["matcher", "locked here", "finish: signal red"]


@pytest.mark.parametrize(
    ("state", "start", "end"),
    [("searching", 0, 3), ("locked", 3, 8), ("locked-wrongly", 8, 10), ("lost", 10, 12)],
)
def test_stretches_lie_where_their_rows_are(state, start, end):
    """Row r of twelve lies r twelfths along the axis."""
    at = [f"{LEFT + row / 12 * (RIGHT - LEFT):.1f}" for row in (start, end)]
    assert re.search(rf'class="is-{state}" d="M{at[0]} \d+H{at[1]}"', timeline(sample_timeline()))


def test_the_legend_of_states_names_what_occurs_and_nothing_else():
    """An alarm too only where there was one."""
    assert words(timeline(sample_timeline()))[-1] == "alarm: surprises have added up"
    quiet = Timeline("t", (("a", ((0, 2, "searching"), (2, 5, "locked")), ()),))
    assert words(timeline(quiet)) == ["searching", "locked"]


def test_a_timeline_says_its_states_in_words():
    """A reader who cannot see it hears them."""
    assert "locked wrongly from row 8, lost from row 10, alarms at rows 10" in timeline(sample_timeline())

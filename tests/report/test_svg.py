"""Charts put numbers where they belong and say in words what they show."""

import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from learnfilter.report.model import Chart, Curve, Forest, Interval
from learnfilter.report.palette import LINE_STYLES
from learnfilter.report.svg import (
    BOTTOM,
    LEFT,
    RIGHT,
    TOP,
    forest_plot,
    interval_text,
    line_chart,
    round_length,
    styles_of,
    ticks,
)

NAN = float("nan")


def line_of(markup: str) -> str:
    """The drawn line of a chart with one curve."""
    found = re.search(r'class="line" d="([^"]*)" stroke-dasharray="none"></path><circle', markup)
    assert found
    return found.group(1)


@given(st.floats(-1e6, 1e6), st.floats(1e-3, 1e6))
def test_ticks_are_round_evenly_spaced_and_inside(low, width):
    """Every step is 1, 2 or 5 times a power of ten, and no tick leaves the axis."""
    found = ticks(low, low + width)
    slack = 1e-6 * (width + abs(low) * 1e-6)  # float64 spacing near |low| = 1e6 is far below this
    assert len(found) >= 1 and found[0] >= low - slack and found[-1] <= low + width + slack
    steps = np.diff(found)
    leading = steps / 10 ** np.floor(np.log10(steps) + 1e-9)
    apart = np.abs(leading[:, None] / [1, 2, 5, 10] - 1).min(axis=1)
    assert (apart < 1e-3).all()  # differences of numbers near 1e6 lose digits


@pytest.mark.parametrize(("limit", "expected"), [(3.5, 2), (2, 2), (9.9, 5), (0.7, 0.5), (1.0, 1), (48, 20)])
def test_a_scale_bar_is_the_longest_round_length_that_fits(limit, expected):
    """Counted by hand."""
    assert round_length(limit) == pytest.approx(expected)


def test_a_curve_runs_from_corner_to_corner_of_its_axes():
    """The least x and y lie at the lower left of the axes, the greatest at the upper right."""
    chart = Chart("t", "x", "y", (Curve("a", np.array([2.0, 6.0]), np.array([0.0, 1.0])),), (0, 1))
    assert line_of(line_chart(chart, {"a": 0})) == f"M{LEFT}.0 {BOTTOM}.0L{RIGHT}.0 {TOP}.0"


def test_a_missing_value_breaks_the_line():
    """NaN is a gap, not a point."""
    chart = Chart("t", "x", "y", (Curve("a", np.arange(4.0), np.array([0.0, 1.0, NAN, 1.0])),), (0, 1))
    assert line_of(line_chart(chart, {"a": 0})).count("M") == 2


def test_every_line_has_its_own_dash_and_marker():
    """Lines can be told apart without colour."""
    assert (
        len({look.dash for look in LINE_STYLES})
        == len({look.marker for look in LINE_STYLES})
        == len(LINE_STYLES)
    )


def test_a_name_keeps_its_style_across_charts():
    """Styles go by first appearance; a repeated name does not use one up."""
    assert styles_of(["a", "b", "a", "c"]) == {"a": 0, "b": 1, "c": 2}


def test_a_chart_says_its_ends_in_words():
    """A reader who cannot see the chart hears where each curve starts and ends."""
    chart = Chart("Loss", "iteration", "nats", (Curve("train", np.array([0, 90]), np.array([4.5, 1.25])),))
    assert "train goes from 4.5 at 0 to 1.25 at 90" in line_chart(chart, {"train": 0})


@pytest.mark.parametrize(
    ("interval", "words"),
    [
        (Interval(0.1, 0.02, 0.18), "favours learned"),
        (Interval(-0.1, -0.2, -0.01), "favours analytic"),
        (Interval(0.1, -0.02, 0.18), "undecided"),
        (Interval(0.1, 0.0, 0.18), "undecided"),
        (Interval(0.1), "undecided"),
    ],
)
def test_a_difference_favours_a_side_only_when_its_interval_leaves_zero(interval, words):
    """An interval that touches zero, or no interval at all, decides nothing."""
    plot = forest_plot(Forest("t", (("row", interval),), "share", "analytic", "learned"))
    assert f"{interval_text(interval, '+.2f')}: {words}</text>" in plot


@pytest.mark.parametrize(
    ("interval", "expected"),
    [
        (Interval(0.917, 0.88, 0.95), "91.7% [88.0%, 95.0%]"),
        (Interval(0.917), "91.7%"),
        (Interval(NAN, 0.1, 0.2), "\u2013"),
    ],
)
def test_an_interval_is_written_with_what_is_known(interval, expected):
    """A number without an interval stands alone; no number is a dash."""
    assert interval_text(interval, ".1%") == expected

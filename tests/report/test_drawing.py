"""A plan as SVG: every stroke has its meaning in the legend."""

import re

import numpy as np
import pytest

from learnfilter.report.drawing import Frame, hex_colour, plan_legend, plan_symbol, site_map
from learnfilter.report.model import Note, Placement, SiteMap


@pytest.mark.parametrize(
    ("srgb", "expected"), [((0, 0, 0), "#000000"), ((1, 1, 1), "#ffffff"), ((0.8, 0.1, 0.2), "#cc1a33")]
)
def test_colours_are_written_in_hexadecimal(srgb, expected):
    """255 x 0.8 = 204 = cc, 25.5 rounds to even 26 = 1a, 51 = 33."""
    assert hex_colour(srgb) == expected


@pytest.mark.parametrize(
    ("stroke", "line"),
    [
        ("open-door", "M4.00 3.00L3.00 3.00"),
        ("shut-door", "M3.00 3.00L2.00 3.00"),
        ("unknown-door", "M2.00 3.00L1.00 3.00"),
        ("window", "M1.00 3.00L0.00 3.00"),
    ],
)
def test_each_kind_has_its_own_stroke(plan, stroke, line):
    """The segment of the plan is drawn under the class of what it is."""
    assert f'class="{stroke}" d="{line}"' in plan_symbol(plan)


def test_walls_wear_their_finish(plan):
    """The red wall of the fixture, 0,0 to 4,0."""
    assert 'style="stroke:#cc1a33" d="M0.00 0.00L4.00 0.00"' in plan_symbol(plan)


def test_the_legend_names_what_occurs_and_nothing_else(plan):
    """Finish, plain wall, window, three doors, two kinds of area: eight entries for the fixture."""
    words = re.findall(r"</svg> ([^<]*)</li>", plan_legend(plan))
    assert words == [
        "finish: signal red",
        "wall, finish unknown",
        "window",
        "open door",
        "shut door",
        "door, state unknown",
        "solid thing",
        "unmapped",
    ]


def test_the_frame_holds_the_whole_plan(plan):
    """The window is wider than the plan's bounds, y turned over for the screen."""
    left, top, width, height = map(float, Frame(plan).view_box.split())
    assert left < 0 and left + width > 4 and top < -3 and top + height > 0


def test_notes_are_numbered_alike_on_the_plan_and_in_the_list(plan):
    """A note without a place keeps its number in the list, and the plan skips it."""
    notes = (Note("first", (1, 1)), Note("nowhere"), Note("third", (2, 2), "error"))
    made = site_map(SiteMap("m", plan, notes))
    assert re.findall(r'text-anchor="middle">(\d+)</text></g>', made) == ["1", "3"]
    assert made.count("<li class=") == 3


def test_values_lie_on_their_cells(plan):
    """Two rows of three cells of 0.5 m from (1, 2): 1.5 m wide, 1 m high, its top at y = 3."""
    made = site_map(SiteMap("m", plan, (), np.arange(6.0).reshape(2, 3), Placement(1.0, 2.0, 0.5), "nats"))
    assert 'width="1.5" height="1" preserveAspectRatio="none" x="1" y="-3"' in made

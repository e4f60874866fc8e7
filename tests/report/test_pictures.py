"""PNG files of plans and drives."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from learnfilter.core.errors import ShapeError
from learnfilter.report import Note, draw_plan, draw_replay
from learnfilter.report.palette import LINE_STYLES, PATCH_LOOKS
from tests.report.samples import sample_trail, sample_trails


def pixels(path: Path) -> np.ndarray:
    """[r c 3] of a picture, as signed numbers."""
    with Image.open(path) as image:
        return np.asarray(image.convert("RGB")).astype(int)


def has_colour(path: Path, srgb) -> bool:
    """Whether any pixel comes within 4 of 255 of a colour (antialiasing spares the middle of a line)."""
    return bool((np.abs(pixels(path) - np.rint(255 * np.array(srgb))).max(axis=-1) <= 4).any())


def test_a_plan_is_drawn_in_its_finishes(plan, tmp_path):
    """The red of the fixture's finish appears; a colour that nothing has does not."""
    draw_plan(plan, tmp_path / "plan.png")
    assert has_colour(tmp_path / "plan.png", (0.8, 0.1, 0.2))
    assert not has_colour(tmp_path / "plan.png", (0.0, 1.0, 1.0))


def test_findings_widen_the_picture_by_their_list(plan, tmp_path):
    """The list stands beside the plan, so that it covers nothing."""
    draw_plan(plan, tmp_path / "plain.png", title="t")
    note = Note("a wall ends short of another", (1, 1), "error")
    draw_plan(plan, tmp_path / "noted.png", title="t", findings=[note])
    assert pixels(tmp_path / "noted.png").shape[1] > pixels(tmp_path / "plain.png").shape[1] + 100


def test_a_trail_is_drawn(plan, tmp_path):
    """Its colour is on the picture only when there is one, and missing poses are no obstacle."""
    trail = np.array([[1, 2.0, 0], [np.nan] * 3, [2, 2, 0], [3.5, 0.5, 0]])
    draw_plan(plan, tmp_path / "a.png")
    draw_plan(plan, tmp_path / "b.png", trail=trail)
    colour = np.array([0xD1, 0x33, 0x5B]) / 255
    assert (has_colour(tmp_path / "a.png", colour), has_colour(tmp_path / "b.png", colour)) == (False, True)


def test_a_replay_shows_where_the_robot_was_lost(plan, tmp_path):
    """The mark of lost stretches is there only when there are any."""
    draw_replay(sample_trails(plan, "matcher", lost=0), tmp_path / "a.png")
    draw_replay(sample_trails(plan, "matcher", lost=2), tmp_path / "b.png")
    colour = np.array([0xC6, 0x53, 0x00]) / 255
    marks = [has_colour(tmp_path / name, colour) for name in ("a.png", "b.png")]
    assert marks == [False, True]


def test_several_trails_have_a_colour_each(plan, tmp_path):
    """Those of the line styles; a single trail is coloured by its entropy instead."""
    draw_replay(sample_trails(plan, "one"), tmp_path / "a.png")
    draw_replay(sample_trails(plan, "one", "two"), tmp_path / "b.png")
    second = [int(LINE_STYLES[1].colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    assert [has_colour(tmp_path / name, second) for name in ("a.png", "b.png")] == [False, True]


def test_patches_that_disagree_are_drawn(plan, tmp_path):
    """The outline of what is gone is there only with a patch of that kind."""
    drawn = sample_trails(plan, "matcher")
    draw_replay(replace(drawn, patches=drawn.patches[1:]), tmp_path / "a.png")
    draw_replay(drawn, tmp_path / "b.png")
    gone = [int(PATCH_LOOKS["gone"].colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    assert [has_colour(tmp_path / name, gone) for name in ("a.png", "b.png")] == [False, True]


def test_a_trail_of_unequal_lengths_is_refused():
    """Five entropies do not fit six poses."""
    trail = sample_trail()
    with pytest.raises(ShapeError, match="entropy_nats"):
        replace(trail, entropy_nats=np.zeros(5))

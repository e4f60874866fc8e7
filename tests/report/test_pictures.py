"""PNG files of plans and drives."""

from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from learnfilter.core.errors import ShapeError
from learnfilter.report import Note, draw_plan, draw_replay


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
    poses = np.column_stack([np.linspace(0.5, 3.5, 6), np.full(6, 2.0), np.zeros(6)])
    common = {"entropy_nats": np.linspace(5, 1, 6), "reference": poses, "locked_at": 3}
    draw_replay(plan, poses, tmp_path / "a.png", **common, lost=np.zeros(6, bool))
    draw_replay(plan, poses, tmp_path / "b.png", **common, lost=np.arange(6) < 2)
    colour = np.array([0xC6, 0x53, 0x00]) / 255
    marks = [has_colour(tmp_path / name, colour) for name in ("a.png", "b.png")]
    assert marks == [False, True]


def test_a_replay_of_unequal_lengths_is_refused_and_leaves_no_file(plan, tmp_path):
    """Five entropies do not fit six poses."""
    with pytest.raises(ShapeError, match="entropy_nats"):
        draw_replay(plan, np.zeros((6, 3)), tmp_path / "a.png", entropy_nats=np.zeros(5))
    assert list(tmp_path.iterdir()) == []

"""Rows of a study: taken up after a kill, and true to the filter they report on."""

import json
import math

import numpy as np
import pytest

from learnfilter.ablation.study import Arena, Filter, Marks, read_rows, run_study
from learnfilter.core.errors import InputError
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import trace
from tests.contracts.small import blend, small_site
from tests.training.drives import drive_on_small_site

FLOOR = 1e-4


def contender(name="blend", hide_colour=False) -> Filter:
    return Filter(name, blend(), MotionModel(), FLOOR, hide_colour=hide_colour)


def ground(*lengths: int) -> Ground:
    """The small site with drives of so many strips."""
    drives = (drive_on_small_site(n, seed)._replace(name=f"drive {seed}") for seed, n in enumerate(lengths))
    return Ground(small_site(), tuple(drives))


def study(file, contenders, grounds, condition="usual"):
    return run_study(contenders, [Arena(condition, g) for g in grounds], Marks(), file, lambda *_: None)


def timeless(row):
    """A row without its wall time."""
    return {key: value for key, value in row.items() if key != "milliseconds"}


def test_a_row_reports_what_the_filter_did(tmp_path):
    """Against the filter run by hand: nats at the truth, and within 0.5 m and 15 degrees or not."""
    usual, place = contender(), ground(5)
    (course,) = place.courses
    (row,) = study(tmp_path / "rows.jsonl", [usual], [place])
    seen = trace(usual.model, usual.motion, place.site, course, FLOOR)
    gap = seen.estimate - course.poses
    turn = np.abs((gap[:, 2] + math.pi) % (2 * math.pi) - math.pi)
    near = (np.hypot(gap[:, 0], gap[:, 1]) <= 0.5) & (turn <= math.radians(15))
    expected = {f"located_{n}": float(near[n - 1]) for n in (1, 2, 4)}
    expected |= {f"nll_{n}": -seen.log_truth[n - 1] for n in (1, 2, 4)}
    assert {key: row[key] for key in row if key.startswith(("located_", "nll_"))} == pytest.approx(expected)


def test_the_cap_is_the_way_driven(tmp_path):
    """Five strips half a metre apart: two metres."""
    (row,) = study(tmp_path / "rows.jsonl", [contender()], [ground(5)])
    assert row["cap_metres"] == pytest.approx(2.0)


def test_hiding_colour_changes_what_the_filter_sees(tmp_path):
    """The same model twice, once without colour."""
    both = [contender(), contender("hidden", hide_colour=True)]
    seen, hidden = study(tmp_path / "rows.jsonl", both, [ground(3)])
    assert seen["nll_2"] != hidden["nll_2"]


def test_a_row_cut_short_by_a_kill_is_dropped_and_run_again(tmp_path):
    """Rows that were whole keep their bytes, wall time included; the cut one comes back at the end."""
    file, all_of_them = tmp_path / "rows.jsonl", ([contender(), contender("again")], [ground(2, 3)])
    before = study(file, *all_of_them)
    text = file.read_text()
    file.write_text(text[:-40])
    after = study(file, *all_of_them)
    assert [timeless(row) for row in after] == [timeless(row) for row in before]
    assert file.read_text().splitlines()[:-1] == text.splitlines()[:-1]
    assert [json.loads(line) for line in file.read_text().splitlines()] == after


def test_a_finished_study_is_not_run_again(tmp_path):
    """Not a byte changes, and the rows are given as they stand."""
    file = tmp_path / "rows.jsonl"
    rows = study(file, [contender()], [ground(2)])
    text = file.read_text()
    assert study(file, [contender()], [ground(2)]) == rows and file.read_text() == text


def test_another_condition_is_run_though_contender_and_drive_are_the_same(tmp_path):
    """The three together say what a row is."""
    file = tmp_path / "rows.jsonl"
    study(file, [contender()], [ground(2)])
    rows = study(file, [contender()], [ground(2)], "dim")
    assert [row["condition"] for row in rows] == ["usual", "dim"]


def test_a_damaged_row_is_named(tmp_path):
    """A line before the last was not cut by a kill: somebody has to look at it."""
    file = tmp_path / "rows.jsonl"
    file.write_text('{"contender": "a"}\n{"conten\n{"contender": "b"}\n')
    with pytest.raises(InputError) as raised:
        read_rows(file)
    assert (raised.value.file, raised.value.place) == (file, "line 2")

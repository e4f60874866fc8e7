"""Rows of a study: taken up after a kill, and true to the filter they report on."""

import json
import math

import numpy as np
import pytest
import torch

from learnfilter.ablation.study import Arena, Filter, Marks, read_rows, run_study
from learnfilter.core.errors import InputError
from learnfilter.filtering.course import Ground, truth_of
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import Trace, trace
from learnfilter.observe.contract import ObservationModel
from tests.contracts.small import LAYOUT, blend, render, small_plan, small_site
from tests.training.drives import drive_on_small_site

FLOOR = 1e-4


def contender(name="blend", hide_colour=False) -> Filter:
    return Filter(name, blend(), MotionModel(), FLOOR, hide_colour=hide_colour)


def ground(*lengths: int) -> Ground:
    """The small site with drives of so many strips."""
    drives = (drive_on_small_site(n, seed)._replace(name=f"drive {seed}") for seed, n in enumerate(lengths))
    return Ground(small_site(), tuple(drives))


def study(file, contenders, grounds, condition="usual"):
    return rows_in(file, contenders, *(Arena(condition, g) for g in grounds))


def rows_in(file, contenders, *arenas, marks=None):
    return run_study(contenders, arenas, marks or Marks(), file, lambda *_: None)


class Told:
    """A contender that believes what it is told, poses [s 3], and is sure of it."""

    name = "told"

    def __init__(self, poses):
        self.poses = np.asarray(poses, float)

    def on(self, arena):
        def run(number, strips):
            poses = self.poses[:strips]
            ones = np.ones(len(poses))
            return Trace(poses, 0.95 * ones, -ones, 0.25 * ones, ones, 0.001, None)

        return run


class Blank(ObservationModel):
    """Every pose is as likely as any other."""

    layout = LAYOUT

    def read(self, site):
        return site.n_cells

    def scores(self, strips, features):
        return torch.zeros(len(strips.depth_m), features, LAYOUT.looks * LAYOUT.bearings // 2)


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


# --- where, and on what, beliefs are judged -----------------------------------------------------------

# Of the drive on the small site, x = 0.75, 1.25, ... at y = 1.25, heading 0, half a turn about (3, 3).
TWINS = [[5.25, 4.75, math.pi], [4.75, 4.75, math.pi], [4.25, 4.75, -math.pi]]


@pytest.mark.parametrize(("fold", "located"), [(1, 0.0), (2, 1.0)])
def test_where_half_a_turn_changes_nothing_its_pose_is_as_right(tmp_path, fold, located):
    """Nobody can tell the two apart; on any other plan the twin is 5 m off."""
    arena = Arena("usual", ground(3), fold=fold, middle=(3.0, 3.0))
    (row,) = rows_in(tmp_path / "rows.jsonl", [Told(TWINS)], arena)
    assert row["located_2"] == located


@pytest.mark.parametrize("fold", [1, 2])
def test_who_is_sure_of_a_twin_is_wrong(tmp_path, fold):
    """Three sure strips lock, at the twin, after a metre; where nothing tells the two apart, nobody may."""
    arena = Arena("usual", ground(3), fold=fold, middle=(3.0, 3.0))
    (row,) = rows_in(tmp_path / "rows.jsonl", [Told(TWINS)], arena)
    assert (row["false_lock"], row["lock_metres"]) == (True, pytest.approx(1.0))
    assert row["right"] == [0.0] * 3


def test_a_quarter_turn_is_not_right_where_only_half_a_turn_is(tmp_path):
    """(0.75, 1.25) a quarter turn about (3, 3) is (4.75, 0.75): right in fourfold symmetry only."""
    quarter = [[4.75, 0.75, math.pi / 2]]
    found = {}
    for fold in (2, 4):
        arena = Arena("usual", ground(1), fold=fold, middle=(3.0, 3.0))
        (row,) = rows_in(tmp_path / f"{fold}.jsonl", [Told(quarter)], arena)
        found[fold] = row["located_1"]
    assert found == {2: 0.0, 4: 1.0}


def test_confidence_is_held_to_the_locks_own_reach(tmp_path):
    """`mass` is that within 0.5 m and 15 degrees, so `right` is too, however near a study calls located."""
    off = ground(1).courses[0].poses + np.array([0.0, 0.6, 0.0])
    marks = Marks((1,), 0.75, math.radians(20))
    (row,) = rows_in(tmp_path / "rows.jsonl", [Told(off)], Arena("usual", ground(1)), marks=marks)
    assert (row["located_1"], row["right"]) == (1.0, [0.0])


@pytest.mark.parametrize(("units", "sites"), [((), ["small", "small"]), (("a", "b"), ["a", "b"])])
def test_rows_name_their_unit_of_evidence(tmp_path, units, sites):
    """The site, unless each drive has a unit of its own."""
    rows = rows_in(tmp_path / "rows.jsonl", [contender()], Arena("usual", ground(2, 2), units=units))
    assert [row["unit"] for row in rows] == sites


def test_marks_say_when_and_how_near(tmp_path):
    """Estimates 0.3 m off are near within 0.4 m and not within 0.2 m, after 3 strips and no others."""
    off = ground(3).courses[0].poses + np.array([0.0, 0.3, 0.0])
    for within_m, located in ((0.4, 1.0), (0.2, 0.0)):
        marks = Marks((3, 9), within_m, math.radians(15))
        file = tmp_path / f"{within_m}.jsonl"
        (row,) = rows_in(file, [Told(off)], Arena("usual", ground(3)), marks=marks)
        judged = {key: row[key] for key in row if key.startswith(("located_", "nll_"))}
        assert judged == {"located_3": located, "nll_3": 1.0}


def test_marks_say_how_far_a_heading_may_be_off(tmp_path):
    """Ten degrees off are near within 15 and not within 5."""
    off = ground(1).courses[0].poses + np.array([0.0, 0.0, math.radians(10)])
    found = []
    for degrees in (15, 5):
        marks = Marks((1,), 0.5, math.radians(degrees))
        file = tmp_path / f"{degrees}.jsonl"
        found += rows_in(file, [Told(off)], Arena("usual", ground(1)), marks=marks)
    assert [row["located_1"] for row in found] == [1.0, 0.0]


@pytest.mark.parametrize(("last", "kept"), [(2, 2), (8, 4)])
def test_a_row_keeps_confidence_rank_and_right_of_every_strip_judged(tmp_path, last, kept):
    """Four strips, of which none beyond the last mark is filtered."""
    marks = Marks((1, last))
    (row,) = rows_in(tmp_path / "rows.jsonl", [contender()], Arena("usual", ground(4)), marks=marks)
    assert [len(row[key]) for key in ("mass", "right", "rank")] == [kept] * 3


def test_a_lattice_of_ones_own_that_is_the_common_one_changes_nothing(tmp_path):
    """The same drives under another key: the same rows but for name and wall time."""
    place = ground(3)
    both = [contender(), contender("own")._replace(lattice="own")]
    common, own = rows_in(tmp_path / "rows.jsonl", both, Arena("usual", place, {"own": place}))
    assert timeless(own) == timeless(common) | {"contender": "own"}


def test_beliefs_on_a_finer_lattice_are_scored_on_the_common_one(tmp_path):
    """A filter that knows nothing, on cells half as wide: the true common cell has as much belief as its
    share of all live fine cells, and each of 16 headings as much as any other."""
    place, fine = ground(1), render(small_plan(), cell_m=0.25)
    (course,) = place.courses
    own = Ground(fine, (course._replace(truth=truth_of(fine, course.poses)),))
    blank = Filter("blank", Blank(), MotionModel(), FLOOR, lattice="fine")
    (row,) = rows_in(
        tmp_path / "rows.jsonl", [blank], Arena("usual", place, {"fine": own}), marks=Marks((1,))
    )
    x, y = fine.grid.x_centres()[fine.cells[:, 1]], fine.grid.y_centres()[fine.cells[:, 0]]
    # the robot stands at (0.75, 1.25); a common cell is 0.5 m wide and its corners lie at multiples of that
    inside = (np.abs(x - 0.75) < 0.25) & (np.abs(y - 1.25) < 0.25)
    assert inside.sum() == 4
    expected = -math.log(inside.sum() / len(fine.cells) / 16)
    assert row["nll_1"] == pytest.approx(expected, abs=1e-5)  # beliefs are float32

"""Studies of movers: what one episode comes to, what many say, and that a killed study goes on."""

import numpy as np
import pytest

from learnfilter.ablation.motion_study import Bout, Budgets, mover_scores, row_of, run_motion_study
from learnfilter.core.seeds import stream
from learnfilter.movers.episode import EpisodeRecord

BUDGETS = Budgets((1, 2, 4), (0.5, 2.0), 0.5, np.radians(15.0))


def record(metres=(0, 0.25, 0.75, 1.25), near=(0, 0, 1, 1), locked=3, contacts=0) -> EpisodeRecord:
    """A robot at (0, 0), estimated there or 5 m off; locked from a strip on, or None: never."""
    count = len(metres)
    near = np.array(near, dtype=bool)
    estimate = np.zeros((count, 3))
    estimate[~near, 0] = 5.0
    state = np.array(["searching"] * count, dtype="<U9")
    if locked is not None:
        state[locked:] = "locked"
    zero = np.zeros(count)
    return EpisodeRecord(
        np.zeros((count, 3)), estimate, near, state, zero, zero, zero, np.zeros((count, 3)),
        np.full(count, 2e-3), np.array(metres, dtype=float), zero, np.full(count, contacts),
        np.zeros(count, dtype=int),
    )  # fmt: skip


def bout(mover="wander", start="a-0", seen=None, **changes) -> Bout:
    site = start.partition("-")[0]
    seen = record() if seen is None else seen
    made = Bout(mover, "beam", "as-trained", site, site, start, 1, (0.0, 0.0), lambda: seen)
    return made._replace(**changes)


def row(**settings) -> dict:
    return row_of(bout(), record(**settings), BUDGETS)


def test_a_lock_is_counted_in_strips_and_metres():
    """At the fourth strip, 1.25 m from the start."""
    found = row()
    assert (found["lock_strips"], found["lock_metres"], found["false_lock"]) == (4, 1.25, False)


def test_a_robot_is_located_at_a_budget_by_its_last_strip_within_it():
    """Wrong up to the second strip and 0.25 m, right from the third on, which is at 0.75 m."""
    found = row()
    assert [found[f"located_{mark}"] for mark in ("1", "2", "4", "0.5m", "2m")] == [0, 0, 1, 0, 1]


def test_what_a_robot_was_at_the_lock_it_stays():
    """Locked wrongly at the second strip, where the episode ended."""
    found = row(metres=(0, 0.25), near=(0, 0), locked=1)
    assert found["false_lock"] and found["located_4"] == found["located_2m"] == 0


def test_a_turned_twin_is_located_and_locked_wrongly():
    """On a plan that half a turn about (2.5, 0) leaves as it is, (5, 0) facing back is as good as (0, 0)."""
    seen = record(near=(0, 0, 0, 0))
    seen.estimate[:, 2] = np.pi
    found = row_of(bout(fold=2, middle=(2.5, 0.0)), seen, BUDGETS)
    assert found["located_4"] == 1 and found["false_lock"]


def test_a_mover_that_never_locks_pays_the_cap():
    """Four strips and two metres, though it hardly moved."""
    seen = record(metres=(0, 0, 0, 0), locked=None)
    (score,) = mover_scores([row_of(bout(), seen, BUDGETS)], BUDGETS, stream(0))
    assert (score.lock_strips.value, score.lock_metres.value) == (4, 2)
    assert (score.median_strips, score.median_metres, score.locked.value) == (4, 2, 0)


def test_contacts_are_a_share_of_motions():
    """One contact, three motions between four strips."""
    (score,) = mover_scores([row_of(bout(), record(contacts=1), BUDGETS)], BUDGETS, stream(0))
    assert score.contacts == pytest.approx(1 / 3)


def test_movers_are_compared_start_by_start():
    """Located after two strips from one more of two starts than the first mover, in any order of rows."""
    soon, late = record(near=(0, 1, 1, 1)), record()
    bouts = [
        bout("wander", "a-0", late), bout("policy", "b-0", soon),
        bout("policy", "a-0", late), bout("wander", "b-0", late),
    ]  # fmt: skip
    rows = [row_of(one, one.run(), BUDGETS) for one in bouts]
    first, second = mover_scores(rows, BUDGETS, stream(0))
    assert (first.mover, first.gained) == ("wander", None)
    assert (second.gained["2"].value, second.gained["2"].n) == (0.5, 2)
    assert second.gained["4"].value == 0


def test_a_study_goes_on_where_it_was_killed(tmp_path):
    """Rows that are written are not driven again; a line cut short is."""
    file, driven = tmp_path / "rows.jsonl", []

    def drives(start):
        return lambda: driven.append(start) or record()

    bouts = [bout(start=start, run=drives(start)) for start in ("a-0", "a-1", "a-2")]
    whole = run_motion_study(bouts, BUDGETS, file, lambda note: None)
    file.write_text("".join(file.read_text().splitlines(keepends=True)[:2])[:-5])
    again = run_motion_study(bouts, BUDGETS, file, lambda note: None)
    assert driven == ["a-0", "a-1", "a-2", "a-1", "a-2"]
    assert again == whole

"""What a replay tells of locks and losses, on rows written by hand."""

import math

import numpy as np
import pytest

from learnfilter.app.episodes import ROW, STATES, Locked, Lost, Unlocked, episodes
from learnfilter.core.estimate import Mode

SEARCHING, LOCKED, LOST = (STATES.index(name) for name in ("searching", "locked", "lost"))
NO_MODES = ()


def rows_of(*states: int, reference: float = math.nan) -> np.ndarray:
    """Rows a second and half a metre apart along y = 2; the reference, where given, that far ahead."""
    rows = np.zeros(len(states), ROW)
    rows["state"], rows["weighed"], rows["surprise"] = states, True, math.nan
    rows["time_s"], rows["travelled_m"] = np.arange(len(states)), 0.5 * np.arange(len(states))
    rows["pose"] = np.column_stack([rows["travelled_m"], np.full(len(states), 2.0), np.zeros(len(states))])
    rows["reference"] = rows["pose"] + np.array([reference, 0.0, 0.0])
    return rows


def test_a_lock_says_when_where_and_after_how_many_strips():
    """Row 3 is the fourth strip, 1.5 m from the start; one of the rows before it was not weighed."""
    rows = rows_of(SEARCHING, SEARCHING, SEARCHING, LOCKED, LOCKED)
    rows["weighed"][1] = False
    (lock,) = episodes(rows, NO_MODES)
    assert isinstance(lock, Locked)
    assert (lock.row, lock.time_s, lock.travelled_m, lock.pose, lock.strips) == (
        3,
        3.0,
        1.5,
        (1.5, 2.0, 0.0),
        3,
    )


@pytest.mark.parametrize(("gap", "right"), [(0.3, True), (0.7, False), (math.nan, None)])
def test_a_lock_is_right_within_half_a_metre_of_the_reference(gap, right):
    """design.md, section 2; where no reference is known, nobody can say."""
    (lock,) = episodes(rows_of(SEARCHING, LOCKED, reference=gap), NO_MODES)
    assert lock.right is right
    assert lock.off_m == (None if right is None else pytest.approx(gap, abs=1e-6))  # kept in float32


def test_a_right_lock_that_goes_astray_names_its_first_wrong_row():
    """The reference leaps 4 m away at row 3, as where somebody carries the robot off."""
    rows = rows_of(SEARCHING, LOCKED, LOCKED, LOCKED, LOCKED, reference=0.0)
    rows["reference"][3:, 0] += 4.0
    (lock,) = episodes(rows, NO_MODES)
    assert (lock.right, lock.first_wrong_row) == (True, 3)
    assert "wrong from row 3 on" in lock.sentence


def test_a_lock_that_lapses_and_comes_back_is_one_lock():
    """A strip with less mass near the mode is no loss."""
    told = episodes(rows_of(SEARCHING, LOCKED, SEARCHING, LOCKED), NO_MODES)
    assert [(type(episode), episode.row) for episode in told] == [(Locked, 1)]


def test_a_belief_that_leaves_the_locked_pose_is_a_loss_without_alarm():
    """And the next lock counts its strips from there: rows 3, 4 and 5."""
    rows = rows_of(SEARCHING, LOCKED, LOCKED, LOST, LOST, LOCKED)
    told = episodes(rows, NO_MODES)
    assert [(type(episode), episode.row) for episode in told] == [(Locked, 1), (Lost, 3), (Locked, 5)]
    assert (told[1].alarm, told[1].was_locked, told[1].surprises, told[2].strips) == (False, True, (), 3)


def test_an_alarm_names_the_strips_whose_surprises_led_to_it():
    """Bets of p = 0.9 pay less than one and p = 1e-4 much more (`runtime.watch.bet`): rows 3 and 4 did it."""
    rows = rows_of(SEARCHING, LOCKED, LOCKED, LOCKED, LOST)
    rows["surprise"] = 0.9, 0.9, 0.9, 1e-4, 1e-3
    rows["alarm"][4] = True
    _, lost, _ = episodes(rows, NO_MODES)
    assert lost.alarm and [row for row, _ in lost.surprises] == [3, 4]
    np.testing.assert_allclose([p for _, p in lost.surprises], [1e-4, 1e-3], rtol=1e-6)  # kept in float32
    assert "p = 0.0001 (row 3), p = 0.001 (row 4)" in lost.sentence


def test_an_alarm_does_not_answer_for_surprises_before_the_one_before_it():
    """Bets begin at nothing after an alarm."""
    rows = rows_of(LOCKED, LOST, LOST)
    rows["surprise"], rows["alarm"] = (1e-4, 1e-4, 1e-5), (False, True, True)
    losses = [episode for episode in episodes(rows, NO_MODES) if isinstance(episode, Lost)]
    assert [[row for row, _ in loss.surprises] for loss in losses] == [[0, 1], [2]]


def test_a_search_broken_off_by_an_alarm_was_no_lock():
    """Told apart from a robot that lost its pose."""
    rows = rows_of(SEARCHING, LOST)
    rows["surprise"], rows["alarm"] = (1e-4, 1e-4), (False, True)
    lost, _ = episodes(rows, NO_MODES)
    assert not lost.was_locked and "before it had locked" in lost.sentence


def test_a_drive_without_a_lock_ends_with_its_modes():
    """Two places share the belief, and the entropy says so."""
    modes = [
        Mode(np.array([1.0, 2.0, 0.0]), 0.5, np.eye(3)),
        Mode(np.array([4.0, 2.0, np.pi]), 0.4, np.eye(3)),
    ]
    rows = rows_of(SEARCHING, SEARCHING)
    rows["entropy"] = 3.25
    (end,) = episodes(rows, modes)
    assert isinstance(end, Unlocked) and not end.ever
    assert end.modes == ((0.5, 1.0, 2.0, 0.0), (0.4, 4.0, 2.0, np.pi)) and end.entropy_nats == 3.25
    assert "never locked" in end.sentence and "50%" in end.sentence and "40%" in end.sentence


def test_a_drive_that_ends_lost_says_so():
    """It had locked, which a drive that never did must not be taken for."""
    end = episodes(rows_of(LOCKED, LOST), NO_MODES)[-1]
    assert isinstance(end, Unlocked) and end.ever and end.state == "lost"


def test_an_episode_goes_into_json_with_its_sentence():
    """Plain values under the names of the attributes."""
    said = episodes(rows_of(SEARCHING, LOCKED), NO_MODES)[0].plain()
    assert (said["kind"], said["row"], said["right"]) == ("locked", 1, None)
    assert said["sentence"].startswith("Row 1 (1.0 s, 0.5 m driven): locked at (0.50, 2.00) m")

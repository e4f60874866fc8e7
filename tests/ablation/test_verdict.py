"""From rows to one sentence: made-up rows of which anybody can tell the answer."""

import math

import numpy as np
import pytest
from scipy import stats

from learnfilter.ablation.statistics import Interval
from learnfilter.ablation.verdict import choose_analytic, column, decide, differences, marks_of, scores
from learnfilter.core.errors import ConfigError
from learnfilter.core.seeds import stream

MARK = 4


def rows(learned, analytic, *, one_site=False, nats=(1.0, 2.0), mark=MARK, condition="usual"):
    """A drive a value: located by the learned model, and by the analytic one, after `mark` strips."""
    return [
        {
            "contender": name,
            "condition": condition,
            "site": "site" if one_site else f"site {number}",
            "unit": f"drive {number}" if one_site else f"site {number}",
            "drive": f"drive {number:02d}",
            f"located_{mark}": float(value),
            f"nll_{mark}": nll,
        }
        for name, values, nll in (("learned", learned, nats[0]), ("analytic", analytic, nats[1]))
        for number, value in enumerate(values)
    ]


def verdict(table, mark=MARK):
    found = differences(table, "learned", "analytic", stream(0, "test"))
    return decide(table, "learned", "analytic", found, mark)


def test_a_model_that_is_better_everywhere_is_shipped():
    """Right on ten sites where the other is wrong, and nearer the truth in nats."""
    found = verdict(rows([1] * 10, [0] * 10))
    assert (found.ship, found.sentence) == ("learned", "Ship the learned model: learned beats analytic.")


def test_a_model_that_is_worse_everywhere_is_not_shipped():
    """Wrong on ten sites where the other is right."""
    found = verdict(rows([0] * 10, [1] * 10))
    expected = "Ship the analytic model: learned does not beat analytic."
    assert (found.ship, found.sentence) == ("analytic", expected)


def test_level_shares_with_lost_nats_ship_the_analytic_model():
    """Where located shares are level on the whole, nats speak."""
    mixed = [1, 0] * 5
    assert verdict(rows(mixed, mixed[::-1], nats=(2.0, 1.0))).ship == "analytic"


def test_a_gain_that_may_be_chance_asks_for_as_many_sites_as_would_settle_it():
    """Six sites won, three lost: the least n with t(n - 1) s / sqrt(n) < mean, less the nine seen."""
    won, lost = [1] * 6 + [0] * 3, [0] * 6 + [1] * 3
    mean, spread = 1 / 3, np.std([1] * 6 + [-1] * 3, ddof=1)
    total = next(n for n in range(9, 999) if stats.t.ppf(0.975, n - 1) * spread / math.sqrt(n) < mean)
    found = verdict(rows(won, lost))
    assert found.ship == "cannot tell"
    assert found.sentence == f"Cannot tell learned from analytic: about {total - 9} more sites would."


def test_no_difference_at_all_asks_for_nothing():
    """As many sites won as lost: more of them would settle nothing."""
    found = verdict(rows([1, 0] * 5, [0, 1] * 5))
    assert found.ship == "cannot tell" and found.sentence.endswith("ship the analytic one.")


def test_being_clearly_worse_at_another_number_of_strips_is_not_overlooked():
    """Better after 4 strips, worse after 8."""
    table = rows([1] * 10, [0] * 10) + rows([0] * 10, [1] * 10, mark=8)
    merged = [a | b for a, b in zip(table[:20], table[20:], strict=True)]
    assert verdict(merged).ship == "cannot tell"


@pytest.mark.parametrize("one_site", [True, False])
def test_units_are_drives_on_one_site_and_sites_on_many(one_site):
    """Six drives on one site, or one on each of six: six units either way."""
    table = rows([1] * 6, [0] * 6, one_site=one_site)
    (found,) = differences(table, "learned", "analytic", stream(0, "test"))
    assert (found.located.n, found.nll.n) == (6, 6)


def test_two_drives_on_each_of_three_sites_are_three_units():
    """Drives of one site resemble each other, so they are not counted as evidence apart."""
    table = [row | {"unit": f"site {int(row['drive'][-2:]) // 2}"} for row in rows([1] * 6, [0] * 6)]
    (found,) = differences(table, "learned", "analytic", stream(0, "test"))
    assert found.located.n == 3


def test_starts_that_overlap_in_one_block_are_one_unit():
    """Ten starts in one block of a recorded drive share their strips: they decide no more than one drive."""
    table = [row | {"unit": "tuesday, to row 20"} for row in rows([1] * 10, [0] * 10, one_site=True)]
    (found,) = differences(table, "learned", "analytic", stream(0, "test"))
    assert found.located.n == 1 and math.isnan(found.located.low)
    assert verdict(table).ship == "cannot tell"


def test_on_one_site_more_drives_are_asked_for_not_sites():
    """The user can drive again; the site stays what it is."""
    table = rows([1] * 6 + [0] * 3, [0] * 6 + [1] * 3, one_site=True)
    assert "more drives would" in verdict(table).sentence


def test_one_drive_decides_nothing():
    """No interval, so no figure of one is printed."""
    found = verdict(rows([1], [0]))
    assert found.sentence == "Cannot tell learned from analytic: one drive decides nothing."
    assert found.confidence == "+100.0 points located after 4 strips, +1.00 nats saved, on one drive."


def test_a_number_of_strips_that_no_drive_has_is_the_users_to_mend():
    """The message names the setting and the largest that would do."""
    with pytest.raises(ConfigError) as raised:
        verdict(rows([1] * 3, [0] * 3), mark=32)
    assert (raised.value.place, raised.value.got) == ("study.mark", 32)
    assert "at most 4" in str(raised.value)


def test_short_drives_are_no_number_rather_than_zero():
    """The second drive never had 8 strips; it is left out of the mean after 8 and counted after 4."""
    table = rows([1, 1, 0], [0, 0, 0])
    for row in table:
        if row["drive"] != "drive 01":
            row |= {"located_8": 1.0, "nll_8": 0.5}
    order = [("usual", f"drive {number:02d}") for number in range(3)]
    assert np.isnan(column(table, "learned", "located_8", order)).tolist() == [False, True, False]
    after = {s.mark: s for s in scores(table, ["learned"], stream(0, "test"))}
    assert after[4].located.value == pytest.approx(2 / 3)
    assert (after[8].located.value, after[8].located.n) == (1.0, 2)


def test_strips_that_no_drive_reached_have_no_row_in_a_table():
    """Four strips at most: marks beyond are left out."""
    assert marks_of(rows([1], [0])) == [4]


def test_conditions_are_told_apart_and_taken_together():
    """Ten sites won under one condition and level under another: half a share gained over both, by site."""
    level = [1, 0] * 5
    table = rows([1] * 10, [0] * 10) + rows(level, level, condition="dark")
    whole, usual, dark = differences(table, "learned", "analytic", stream(0, "test"))
    assert [d.condition for d in (whole, usual, dark)] == ["all conditions", "usual", "dark"]
    assert [d.located.value for d in (whole, usual, dark)] == [0.5, 1.0, 0.0]
    assert [d.located.n for d in (whole, usual, dark)] == [10, 10, 10]


def test_p_values_are_adjusted_for_the_number_of_conditions():
    """(0, 6) discordant pairs: p = 1/32 (exact McNemar, check_values S4), doubled by Holm for two."""
    table = rows([1] * 6, [0] * 6) + rows([1] * 6, [1] * 6, condition="dark")
    p = {d.condition: d.p for d in differences(table, "learned", "analytic", stream(0, "test"))}
    assert (p["usual"], p["dark"]) == (pytest.approx(2 / 32), 1.0)


def test_a_condition_that_is_lost_beyond_doubt_is_named():
    """Won on the whole, but not where it is dark: nobody should find that out on the robot."""
    table = [
        row
        for name, (learned, analytic) in {
            "a": (1, 0), "b": (1, 0), "c": (1, 0), "dark": (0, 1),
        }.items()
        for row in rows([learned] * 12, [analytic] * 12, condition=name)
    ]  # fmt: skip
    found = verdict(table)
    assert found.ship == "cannot tell" and "loses under dark" in found.sentence


def test_differences_favour_the_learned_model_above_zero():
    """Located in 1 of 2 against none: +0.5; 1 nat against 2: +1 saved."""
    (found,) = differences(rows([1, 0], [0, 0]), "learned", "analytic", stream(0, "test"))
    assert isinstance(found.located, Interval)
    assert (found.located.value, found.nll.value) == (0.5, 1.0)


def test_the_opponent_is_the_analytic_model_with_the_fewest_nats():
    """Chosen by validation, before the test."""
    assert choose_analytic({"beam": 3.0, "endpoint": 2.0, "beam+colour": 2.5}) == "endpoint"

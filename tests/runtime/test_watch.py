"""Surprise: p-values that are uniform while the plan is true, bets that pay one on average, alarms."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import kstest

from learnfilter.runtime.watch import Usual, Watch, bet

EVEN = Usual(np.array([0.0, 1.0]), np.array([1e-12, 1.0]))  # log evidence that is its own p-value


def watch(alarm: float, searching: Usual = EVEN, locked: Usual = EVEN) -> Watch:
    return Watch(searching, locked, alarm)


def test_a_bet_pays_one_on_average():
    """The integral over p in (0, 1), with p = exp(-u): to u = 600, and 1 / u^2 beyond, which is 1 / 600."""
    paid = sum(quad(lambda u: bet(math.exp(-u)) * math.exp(-u), a, b)[0] for a, b in ((0, 30), (30, 600)))
    # the limit near p = 1 is within 1e-4 of the closed form, over a width of 1e-4
    assert paid + 1 / 600 == pytest.approx(1.0, abs=1e-6)


@pytest.mark.parametrize("p", [1e-9, 1e-3, 0.05, 0.5, 0.99, 0.99995, 1.0])
def test_a_bet_is_the_mixture_of_calibrators(p):
    """The integral over e in (0, 1) of e p^(e - 1), Vovk and Wang 2021."""
    expected, _ = quad(lambda e: e * p ** (e - 1), 0, 1)
    assert bet(p) == pytest.approx(expected, rel=1e-4)  # the limit stands for the last 1e-4


@pytest.mark.parametrize("alarm", [5.0, 20.0, 100.0])
def test_alarms_come_at_most_once_in_so_many_strips(alarm):
    """Independent uniform p-values: the mean time between alarms is no less than the threshold."""
    state, alarms, draws = watch(alarm), 0, np.random.default_rng(0).random(20_000)
    for p in draws:
        state = state.after(float(p), locked=False)
        alarms += state.alarmed
    assert 0 < alarms / len(draws) <= 1 / alarm


def test_surprises_add_up():
    """One strip of the rarest hundredth is no alarm, four running are; then the count begins anew."""
    # (1 - p + p log p) / (p log(p)^2) = 4.45 each: 4.45, 24.3, 112, 505
    state, alarms = watch(400.0), []
    for _ in range(4):
        state = state.after(0.01, locked=True)
        alarms.append(state.alarmed)
    assert alarms == [False, False, False, True] and state.bets == 0.0


def test_what_is_usual_never_adds_up():
    """Strips in the middle of what is usual, for ever."""
    state = watch(10.0)
    for _ in range(1000):
        state = state.after(0.6, locked=True)
        assert not state.alarmed


@pytest.mark.parametrize(("shift", "uniform"), [(0.0, True), (-0.5, False)])
def test_p_values_are_uniform_while_nothing_has_changed(shift, uniform):
    """On fresh draws of what the table was made from; half a standard deviation lower they are not."""
    rng = np.random.default_rng(0)
    usual = Usual.of(rng.normal(size=20_000))
    p = [usual.p_value(nats) for nats in rng.normal(shift, size=500)]
    assert (kstest(p, "uniform").pvalue > 0.01) == uniform


def test_the_lowest_strips_keep_a_p_value_each():
    """Rank over count plus one: what is rarer than anything seen is never impossible."""
    usual = Usual.of(np.arange(99.0))
    found = [usual.p_value(nats) for nats in (-1e9, 0.0, 1.0, 49.0, 98.0, 1e9)]
    np.testing.assert_allclose(found, [0.01, 0.01, 0.02, 0.5, 0.99, 0.99])


@pytest.mark.parametrize("count", [1, 2, 50, 5000])
def test_a_table_rises(count):
    """So that it can be looked up between its entries; ties in it are one entry."""
    usual = Usual.of(np.random.default_rng(0).normal(size=count).round(2))
    assert (np.diff(usual.nats) > 0).all() and (np.diff(usual.share) > 0).all()
    assert usual.share[0] > 0 and usual.share[-1] < 1


@pytest.mark.parametrize(("locked", "expected"), [(False, 0.3), (True, 0.8)])
def test_a_locked_robot_is_judged_by_what_locked_robots_see(locked, expected):
    """Two tables."""
    level = {share: Usual(np.array([0.0]), np.array([share])) for share in (0.3, 0.8)}
    state = watch(9.0, searching=level[0.3], locked=level[0.8]).after(5.0, locked)
    assert state.p == pytest.approx(expected)


def test_before_the_first_strip_nothing_is_said():
    """No p-value, no alarm."""
    assert math.isnan(watch(9.0).p) and not watch(9.0).alarmed

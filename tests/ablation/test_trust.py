"""Whether a filter's own confidence can be believed: made-up rows of which anybody can tell the answer."""

import math

import numpy as np
import pytest
from scipy import stats

from learnfilter.ablation.trust import trust
from learnfilter.core.seeds import stream


def row(number, mass, right, rank, *, site=None, condition="usual", contender="ours", **lock):
    """One drive: confidence, whether it was right, and rank of the truth after each of its strips."""
    never = {"lock_metres": None, "cap_metres": 10.0, "false_lock": False}
    return {
        "contender": contender,
        "condition": condition,
        "unit": f"site {number}" if site is None else site,
        "drive": f"drive {number:02d}",
        "mass": list(mass),
        "right": list(right),
        "rank": list(rank),
        **never,
        **lock,
    }


def judged(rows):
    return trust(rows, "ours", stream(0, "test"))


def coins(drives=20, strips=100, overstated=0.0):
    """Drives that are right as often as they say, less what is overstated; ranks are uniform."""
    rng = stream(3, "tests", "coins")
    for number in range(drives):
        truth = rng.uniform(0.1, 0.8, strips)
        yield row(number, truth + overstated, (rng.random(strips) < truth).astype(float), rng.random(strips))


def test_a_confidence_that_comes_true_as_often_as_it_says_is_calibrated():
    """2000 coins in 10 bins: chance leaves a square of about 4e-4, so a root of 0.02, times 2.5."""
    assert judged([*coins()]).calibration.value < 0.05


def test_an_overstated_confidence_is_found_with_its_interval_over_sites():
    """0.2 too high everywhere (standard error 0.01 of 2000 coins, times 3); every site shows it."""
    found = judged([*coins(overstated=0.2)]).calibration
    assert found.value == pytest.approx(0.2, abs=0.03)
    assert 0.1 < found.low < found.value < found.high < 0.3 and found.n == 20


def test_a_constant_overconfidence_has_its_closed_form():
    """Right 3 times of 5 at 0.9, bins of 10: sqrt(0.3^2 - 0.6 x 0.4 / 9) (Kumar, Liang, Ma 2019)."""
    rows = [row(n, [0.9] * 5, [1, 1, 1, 0, 0], [0.5] * 5) for n in range(20)]
    assert judged(rows).calibration.value == pytest.approx(math.sqrt(0.09 - 0.24 / 9))


def test_strips_without_a_reference_are_no_evidence_on_calibration():
    """Where nobody knows whether the pose was right, a confidence of 0 changes nothing."""
    known = [row(n, [0.9] * 5, [1, 1, 1, 0, 0], [0.5] * 5) for n in range(20)]
    unknown = [row(n, [0.0] * 9, [math.nan] * 9, [0.5] * 9) for n in range(20, 25)]
    assert judged(known + unknown).calibration.value == judged(known).calibration.value


def test_fewer_strips_than_two_a_bin_are_no_number():
    """Nineteen strips for ten bins, on two sites: no value, no bounds, no crash."""
    found = judged([row(0, [0.5] * 10, [1] * 10, [0.5] * 10), row(1, [0.5] * 9, [1] * 9, [0.5] * 9)])
    assert np.isnan([found.calibration.value, found.calibration.low, found.calibration.high]).all()
    assert found.strips == 19


def test_coverage_of_uniform_ranks_has_no_gap():
    """A thousand ranks spread evenly: the share below each level is the level, to half a rank."""
    ranks = ((np.arange(1000) + 0.5) / 1000).reshape(10, 100)
    rows = [row(n, [0.5] * 100, [1] * 100, own) for n, own in enumerate(ranks)]
    assert judged(rows).coverage.value <= 0.5e-3


@pytest.mark.parametrize(("rank", "gap"), [(0.0, 0.5), (1.0, 0.95), (0.7, 0.5)])
def test_the_worst_gap_of_coverage_is_that_of_the_worst_level(rank, gap):
    """Rank 0: all sets of 0.5 hold the truth. Rank 1: none of 0.95 does. Rank 0.7: none of 0.5."""
    rows = [row(n, [0.5] * 4, [1] * 4, [rank] * 4) for n in range(3)]
    assert judged(rows).coverage.value == pytest.approx(gap)


def test_an_interval_of_coverage_rests_on_sites_and_not_on_drives():
    """Eight sites at a gap of 0.5 and eight at 0.3, four drives on each: 0.4, and quantiles of a binomial."""
    ranks = ([0.0] * 10, [0.0] * 8 + [0.6] * 2)  # sets of 0.5 hold all ten truths, or eight
    rows = [row(n, [0.5] * 10, [1] * 10, ranks[n // 4 % 2], site=f"site {n // 4}") for n in range(64)]
    found = judged(rows).coverage
    low, high = 0.3 + 0.2 * stats.binom.ppf((0.025, 0.975), 16, 0.5) / 16
    assert (found.value, found.n) == (pytest.approx(0.4), 16)
    # a step of the binomial is 0.0125, which 200 resamples may miss by; 64 drives apart would give 0.025 less
    assert (found.low, found.high) == pytest.approx((low, high), abs=0.015)


def test_metres_until_lock_are_censored_at_the_cap():
    """Locks after 2 and 4 m, and none within 12: the restricted mean is 6 m; two of three locked."""
    locks = ({"lock_metres": 2.0}, {"lock_metres": 4.0}, {"lock_metres": None, "cap_metres": 12.0})
    found = judged([row(n, [0.5], [1], [0.5], **lock) for n, lock in enumerate(locks)])
    assert (found.lock_metres.value, found.lock_metres.n) == (6.0, 3)
    assert found.lock_metres.low <= 6.0 <= found.lock_metres.high
    assert (found.locked.value, found.locked.n) == (pytest.approx(2 / 3), 3)


def test_false_locks_are_a_share_of_all_drives():
    """Two false locks among ten drives of which five locked: scipy's Wilson interval of 2 in 10."""
    locked = [{"lock_metres": 1.0, "false_lock": n < 2} for n in range(5)]
    found = judged([row(n, [0.5], [1], [0.5], **lock) for n, lock in enumerate(locked + [{}] * 5)])
    expected = stats.binomtest(2, 10).proportion_ci(method="wilson")
    assert (found.false_locks.low, found.false_locks.high) == pytest.approx((expected.low, expected.high))
    assert (found.false_locks.value, found.false_locks.n) == (0.2, 10)


def test_the_same_drive_under_two_conditions_counts_twice():
    """Ten strips under each."""
    rows = [row(0, [0.5] * 10, [1] * 10, [0.5] * 10, condition=name) for name in ("usual", "dark")]
    assert judged(rows).strips == 20


def test_rows_of_other_contenders_are_left_out():
    """The neighbour is always wrong."""
    ours = [*coins(drives=4)]
    theirs = [own | {"contender": "theirs", "right": [0.0] * 100} for own in ours]
    assert judged(ours + theirs) == judged(ours)

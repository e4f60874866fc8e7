"""Which patches of the plan are said to disagree."""

import numpy as np
import pytest
from scipy.stats import binomtest

from learnfilter.app.patches import Patch, areas, disagreeing, usual_share
from learnfilter.core.grid import PoseGrid
from learnfilter.runtime.tally import Counts

GRID = PoseGrid(4, 6, 8, 0.25, -1.0, 2.0)  # patches of 0.5 m: 3 rows of 4


def counts_of(met=(), gone=(), new=()) -> Counts:
    """Zero but for {(row, column): count} of each kind."""
    counts = Counts.none(GRID)
    for array, given in zip(counts, (met, gone, new), strict=True):
        for place, count in dict(given).items():
            array[place] = count
    return counts


def test_a_patch_looked_through_far_too_often_is_not_as_drawn():
    """Where and how often; its p-value from scipy's own test, times the two patches seen (Holm)."""
    counts = counts_of(met={(0, 1): 2, (2, 3): 40}, gone={(0, 1): 6, (2, 3): 1})
    (patch,) = disagreeing(counts, GRID, 0.1)
    expected = 2 * binomtest(6, 8, 0.1, alternative="greater").pvalue
    assert patch[:7] == ("gone", -0.25, 2.25, 0.5, 2, 6, 0)
    assert patch.p == pytest.approx(expected, rel=1e-9)  # both exact tails


@pytest.mark.parametrize(("seen", "expected"), [(2, 1), (12, 0)])
def test_more_patches_seen_ask_for_more(seen, expected):
    """Two looks of two, usual share 0.05: 0.0025, below 0.01 times two patches' worth, not times twelve."""
    counts = counts_of(met={(r, c): 5 for r in range(3) for c in range(4)})
    counts.met.reshape(-1)[seen:] = 0
    counts.met[0, 0], counts.gone[0, 0] = 0, 2
    assert len(disagreeing(counts, GRID, 0.05)) == expected


def test_something_new_is_met_by_three_strips_at_least():
    """Somebody who walks by is met in one or two."""
    (patch,) = disagreeing(counts_of(new={(1, 0): 3, (1, 2): 2}), GRID, 0.1)
    assert patch == Patch("new", -0.75, 2.75, 0.5, 0, 0, 3, None)


def test_a_plan_that_is_true_is_seldom_blamed():
    """400 drives with the usual share of looks through: Holm promises that at most 1 % name a patch."""
    rng = np.random.default_rng(0)
    named = 0
    for _ in range(400):
        seen = rng.integers(1, 60, (3, 4))
        gone = rng.binomial(seen, 0.1)
        named += bool(disagreeing(Counts(seen - gone, gone, np.zeros((3, 4), int)), GRID, 0.1))
    assert named <= 11  # mean 4 at most; the chance of more than 11 is below 0.1 %


def test_patches_of_a_kind_that_touch_are_one_area():
    """Corner to corner counts; another kind does not join in, a gap parts them."""
    counts = counts_of(new={(0, 0): 3, (1, 1): 7, (1, 3): 4}, gone={(0, 1): 30})
    found = areas(disagreeing(counts, GRID, 0.1))
    assert [(area.kind, len(area.patches)) for area in found] == [("gone", 1), ("new", 2), ("new", 1)]
    assert found[1].sentence == "Something new: x -1.0 to 0.0 m, y 2.0 to 3.0 m; up to 7 strips met it."


@pytest.mark.parametrize(
    ("watch", "expected"), [({"gone_share": 0.07}, 0.07), (None, 0.25), ({"gone_share": 0.0}, 0.01)]
)
def test_the_usual_share_is_the_calibrated_one_or_the_drives_own(watch, expected):
    """3 of 12 looks in the drive; a calibration that met no exception promises no certainty."""
    counts = counts_of(met={(0, 0): 9}, gone={(0, 1): 3})
    assert usual_share({"watch": watch}, counts) == pytest.approx(expected)

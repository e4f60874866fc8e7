"""What is measured on a drive, against hand-made cases and SciPy."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from learnfilter.core.errors import ShapeError
from learnfilter.drives.metrics import (
    Lock,
    circular_mean,
    first_lock,
    judge,
    located,
    pose_errors,
    summarise,
    travelled,
)

NAN = float("nan")


def test_distance_is_euclidean():
    """The 3-4-5 triangle."""
    metres, _ = pose_errors([3.0, 4.0, 0.0], [0.0, 0.0, 0.0])
    assert metres == 5.0


@pytest.mark.parametrize(
    ("a", "b", "expected"), [(179, -179, 2), (-179, 179, 2), (10, 350, 20), (0, 180, 180)]
)
def test_heading_error_goes_the_short_way(a, b, expected):
    """Directional statistics, check value S13: 179 to -179 degrees is 2 degrees, never 358."""
    _, radians = pose_errors([0, 0, np.radians(a)], [0, 0, np.radians(b)])
    # 1e-9: the tolerance S13 gives
    assert expected == pytest.approx(np.degrees(radians), abs=1e-9)


def test_pose_errors_broadcast():
    """One reference pose for many estimates."""
    metres, radians = pose_errors(np.zeros((4, 5, 3)), [1.0, 0.0, 0.0])
    assert (metres.shape, radians.shape) == ((4, 5), (4, 5))


@pytest.mark.parametrize(
    ("gap_m", "gap_deg", "expected"),
    [(0.5, 0, 1), (0.51, 0, 0), (0, 14.9, 1), (0, -14.9, 1), (0, 15.1, 0), (0.4, 14, 1), (0.51, 15.1, 0)],
)
def test_located_needs_place_and_heading(gap_m, gap_deg, expected):
    """Half a metre and 15 degrees, both."""
    assert expected == located([gap_m, 0, np.radians(gap_deg)], [0, 0, 0])


@pytest.mark.parametrize("unknown", [0, 1, 2])
def test_an_unknown_reference_is_not_judged(unknown):
    """NaN, not a failure."""
    reference = np.zeros(3)
    reference[unknown] = np.nan
    assert np.isnan(located(np.zeros(3), reference))


def test_circular_mean_crosses_north():
    """Directional statistics, check value S13: the mean of 350 and 10 degrees is 0."""
    assert circular_mean(np.radians([350, 10])) == pytest.approx(0.0, abs=np.radians(1e-9))


@given(st.lists(st.floats(-3, 3), min_size=1, max_size=6), st.floats(-10, 10))
def test_circular_mean_agrees_with_scipy(angles, turn):
    """scipy.stats.circmean, compared around the circle, where a mean direction exists."""
    angles = np.array(angles) + turn
    if abs(np.exp(1j * angles).mean()) > 1e-3:
        gap = circular_mean(angles) - stats.circmean(angles)
        # 1e-9: the mean vector may be as short as 1e-3, which costs three digits of 1e-15
        assert np.cos(gap) == pytest.approx(1.0, abs=1e-9)


def test_circular_mean_takes_weights_and_an_axis():
    """Weights 1, 0 pick the first row, 0, 1 the second."""
    angles = np.array([[0.1, 2.0], [1.0, -3.0]])
    weights = np.array([[1.0, 0.0], [0.0, 1.0]])
    np.testing.assert_allclose(circular_mean(angles, weights, axis=0), [0.1, -3.0])


@pytest.mark.parametrize(
    ("mass", "expected"),
    [
        ([0.9, 0.9, 0.9], 2),
        ([0.95, 0.95, 0.89, 0.95, 0.95, 0.95], 5),
        ([0.95, 0.95, 0.1], None),
        ([1.0, 1.0], None),
        ([], None),
        ([1.0, NAN, 1.0, 1.0, 1.0], 4),
    ],
)
def test_lock_needs_three_strips_running(mass, expected):
    """design.md section 2: three weighed strips running with at least 0.9 near the best mode."""
    assert expected == first_lock(mass)


@given(st.lists(st.floats(0, 1), max_size=12), st.lists(st.floats(0, 1), max_size=5))
def test_lock_does_not_look_ahead(past, future):
    """What comes later never moves a lock that was declared."""
    at = first_lock(past)
    if at is not None:
        assert at == first_lock(past + future)


def test_lock_is_lost_when_the_mass_spreads():
    """The state is of now, not of ever."""
    lock = Lock().after(1.0).after(1.0).after(1.0)
    assert lock.held and not lock.after(0.5).held


def test_travelled_adds_up_steps_in_any_direction():
    """Sideways counts, turning on the spot does not."""
    odometry = [[0, 0, 0], [3, 4, 1], [0, 0, 2], [0, -1, 0]]
    np.testing.assert_allclose(travelled(odometry), [0, 5, 5, 6])


def judged(offset_m=0.0, mass=(0.5, 1, 1, 1), cap_m=10.0, reference=None):
    """A drive of four strips, one metre apart, whose estimates are off by `offset_m`."""
    truth = np.zeros((4, 3)) if reference is None else reference
    return judge(
        np.array([offset_m, 0, 0]) + np.zeros((4, 3)),
        truth,
        np.log([0.1, 0.2, 0.5, 1]),
        mass,
        [0, 1, 2, 3],
        cap_m,
    )


def test_a_right_lock_counts_its_metres():
    """Held at the fourth strip, three metres on."""
    outcome = judged()
    assert (outcome.locked, outcome.metres_until_lock, outcome.false_lock) == (True, 3.0, 0.0)


def test_a_wrong_lock_is_false():
    """A metre off, and sure of it."""
    outcome = judged(offset_m=1.0)
    assert (outcome.locked, outcome.false_lock) == (True, 1.0)


@pytest.mark.parametrize(("mass", "cap_m"), [((0.5, 1, 1, 0.5), 10.0), ((0.5, 1, 1, 1), 2.5)])
def test_no_lock_before_the_cap_is_censored_there(mass, cap_m):
    """Never sure, or sure too late; neither is a false lock."""
    outcome = judged(offset_m=1.0, mass=mass, cap_m=cap_m)
    assert (False, cap_m, 0.0) == (outcome.locked, outcome.metres_until_lock, outcome.false_lock)


def test_a_lock_at_an_unknown_pose_is_neither_true_nor_false():
    """Without a reference pose at that strip nobody knows."""
    reference = np.zeros((4, 3))
    reference[3] = np.nan
    assert np.isnan(judged(reference=reference).false_lock)


def test_series_of_different_length_are_refused():
    """One value a weighed strip, in every series."""
    with pytest.raises(ShapeError, match="mass_near_mode"):
        judged(mass=(1, 1, 1))


def test_summary_holds_one_number_a_drive():
    """Located and nats after n strips, NaN where the drive was shorter."""
    table = summarise([judged(), judged(offset_m=1.0)], after=(2, 5))
    np.testing.assert_array_equal(table["located_after_2"], [1, 0])
    np.testing.assert_allclose(table["nll_after_2"], [np.log(5)] * 2)
    assert np.isnan(table["located_after_5"]).all() and np.isnan(table["nll_after_5"]).all()
    np.testing.assert_array_equal(table["false_lock"], [0, 1])
    np.testing.assert_array_equal(table["metres_until_lock"], [3, 3])
    np.testing.assert_array_equal(table["locked"], [1, 1])

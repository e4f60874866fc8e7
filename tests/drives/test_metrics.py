"""What is measured on a drive, against hand-made cases and SciPy."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from learnfilter.drives.metrics import (
    Lock,
    first_lock,
    located,
    pose_errors,
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

"""What a robot's filter answers to movers."""

import numpy as np
import pytest

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import StepError
from learnfilter.core.poses import compose, through_mount
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.moves import MOTIONS, Motion
from tests.shipping import STRIP, rehearsed

STEP = Motion(0.5, 0.0, 0.2)  # enough to be weighed


@pytest.fixture(scope="module")
def localizer(shipped) -> Localizer:
    return Localizer(load_bundle(shipped("beam+colour")))


@pytest.fixture
def awake(localizer) -> Localizer:
    localizer.reset()
    localizer.step(np.zeros(3), *strip(0))
    return localizer


def strip(row):
    drive = rehearsed()[1]
    return drive.depth_m[row], drive.rgb[row]


@pytest.mark.parametrize(
    "ask",
    [
        lambda to: to.modes,
        lambda to: to.foresee(STEP),
        lambda to: to.promised(STEP),
        lambda to: to.outlook(MOTIONS),
    ],
)
def test_before_the_first_strip_nothing_is_known(localizer, ask):
    """Said, not guessed."""
    localizer.reset()
    with pytest.raises(StepError, match="first strip"):
        ask(localizer)


def test_what_is_foreseen_is_what_comes(awake):
    """The foreseen belief, weighed with the strip that follows, is the filter's own next belief."""
    depth, rgb = strip(1)
    layout = awake.bundle.site.layout
    depth_m = np.where((depth >= STRIP.min_range_m) & (depth <= STRIP.max_range_m), depth, np.nan)
    laid = layout.lay(depth_m).astype(np.float32), layout.lay(srgb_to_linear(rgb), axis=0).astype(np.float32)
    part, _ = awake.scale.weigh(awake.foresee(STEP), *laid)
    awake.step(STEP, depth, rgb)
    np.testing.assert_allclose(awake.belief[:, *part.window], part.planes, rtol=0, atol=1e-7)


def test_foreseeing_changes_nothing(awake):
    """Asked as often as one likes."""
    before = awake.belief
    awake.foresee(STEP), awake.promised(STEP), awake.outlook(MOTIONS)
    np.testing.assert_array_equal(awake.belief, before)


def test_modes_are_carried_by_a_motion_too_small_to_be_weighed(awake):
    """Of the sensor: the robot's motion seen through the mount."""
    before, small = awake.modes, (0.1, 0.05, 0.1)
    assert not awake.step(small, *strip(1)).weighed
    expected = compose([mode.pose for mode in before], through_mount(small, STRIP.mount))
    np.testing.assert_allclose([mode.pose for mode in awake.modes], expected, atol=1e-12)


def test_what_a_mode_promises_is_in_its_outlook(awake):
    """A sector whose every column is promised a return holds their mean; 1e-5 for float32."""
    outlook, motion = awake.outlook(MOTIONS), 3
    depth, _ = awake.promised(MOTIONS[motion])
    looks = awake.bundle.site.layout.present()
    sector = np.arange(depth.shape[1]) * 8 // depth.shape[1]
    groups = [looks & (sector == s) for s in range(8)]
    expected = np.stack([depth[:, group].mean(axis=1) / STRIP.max_range_m for group in groups], axis=1)
    whole = np.isfinite(expected)
    assert whole.sum() >= 8  # of four modes' eight sectors or more
    held = outlook.view[: len(depth), motion, :8]
    np.testing.assert_allclose(held[whole], expected[whole], rtol=0, atol=1e-5)


def test_the_outlook_holds_the_strip_that_was_seen_last(awake):
    """Weighed or not."""
    before = awake.outlook(MOTIONS).seen
    awake.step(np.zeros(3), *strip(9))
    assert not np.allclose(awake.outlook(MOTIONS).seen, before)

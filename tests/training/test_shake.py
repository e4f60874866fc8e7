"""Shaken strips: as far as they were told to be, each drive in its own way."""

import numpy as np
import pytest
import torch

from learnfilter.core.seeds import stream
from learnfilter.observe.contract import Strips
from learnfilter.training.shake import ShakeSettings, shake
from tests.contracts.small import strips

DRIVES, STEPS, COLUMNS = 64, 3, 8


def even(depth=2.0, rgb=(0.1, 0.2, 0.3)):
    """Steps of many drives, step-major, all alike: what comes back is the factor it was multiplied by."""
    shape = (STEPS * DRIVES, COLUMNS)
    return Strips(
        torch.full(shape, depth), torch.tensor(rgb).expand(*shape, 3).clone(), torch.ones(COLUMNS, dtype=bool)
    )


def shaken(given, seed=0, drives=DRIVES, **settings):
    return shake(given, ShakeSettings(share=1.0, **settings), drives, stream(seed, "tests", "shake"))


def factors(given, result, channel=0):
    """[steps drives] of the ratios of one channel, after seeing that all columns of a strip share theirs."""
    ratio = (result.rgb / given.rgb)[..., channel].numpy()
    np.testing.assert_allclose(ratio, np.broadcast_to(ratio[:, :1], ratio.shape), rtol=1e-6)  # float32
    return ratio[:, 0].reshape(STEPS, DRIVES)


def test_no_share_changes_nothing():
    """Whatever else is set."""
    given = strips()
    settings = ShakeSettings(0.0, light=1.0, tint=1.0, range=0.5, missing=0.9)
    for before, after in zip(given, shake(given, settings, 1, stream(0, "tests")), strict=True):
        assert torch.equal(before.nan_to_num(-1), after.nan_to_num(-1))


def test_about_the_stated_share_of_batches_is_changed():
    """A quarter of 400: standard error 0.022, times 3."""
    given, rng, settings = even(), stream(0, "tests", "share"), ShakeSettings(share=0.25, range=0.1)
    changed = [
        not torch.equal(shake(given, settings, DRIVES, rng).depth_m, given.depth_m) for _ in range(400)
    ]
    assert np.mean(changed) == pytest.approx(0.25, abs=0.065)


def test_light_dims_each_drive_by_a_factor_of_its_own():
    """All channels and steps of a drive alike, within exp(-1.2) and exp(0.3), and near both among 64."""
    given = even()
    level = factors(given, result := shaken(given, light=1.2))
    for channel in (1, 2):
        np.testing.assert_allclose(factors(given, result, channel), level, rtol=1e-6)  # float32
    np.testing.assert_allclose(level, np.broadcast_to(level[0], level.shape), rtol=1e-6)
    assert len(np.unique(level[0])) == DRIVES
    # a uniform exponent misses a tenth of its interval at either end with a chance of 0.9^64 = 0.001
    assert -1.2 <= np.log(level).min() < -1.05 and 0.15 < np.log(level).max() <= 0.3


def test_tint_turns_each_channel_by_itself():
    """Within exp(+-0.35), and not all channels alike."""
    given = even()
    result = shaken(given, tint=0.35)
    exponents = np.log([factors(given, result, channel)[0] for channel in range(3)])
    # a uniform exponent stays off a tenth of its interval at either end with a chance of 0.9^192 = 2e-9
    assert -0.35 - 1e-6 <= exponents.min() < -0.28 and 0.28 < exponents.max() <= 0.35 + 1e-6
    assert len(np.unique(exponents)) == 3 * DRIVES


def test_ranges_of_a_drive_are_all_too_long_or_all_too_short_alike():
    """1 +- 0.03, one factor a drive, on both sides of one."""
    ratio = (shaken(even(), range=0.03).depth_m / 2.0).numpy().reshape(STEPS, DRIVES, COLUMNS)
    np.testing.assert_allclose(ratio, np.broadcast_to(ratio[:1, :, :1], ratio.shape), rtol=1e-6)  # float32
    assert len(np.unique(ratio[0, :, 0])) == DRIVES
    assert 0.97 - 1e-6 <= ratio.min() < 0.98 and 1.02 < ratio.max() <= 1.03 + 1e-6


def test_colour_saturates_at_white():
    """No sensor gives more."""
    result = shaken(even(rgb=(0.99, 0.99, 0.99)), light=1.2, tint=0.35)
    assert float(result.rgb.max()) == 1.0


def test_what_was_missing_stays_missing():
    """Columns without a return and without colour, and no others, where none shall go missing."""
    given = strips(count=12, missing=0.3)
    result = shaken(given, drives=4, light=1.0, tint=0.3, range=0.1)
    assert torch.equal(result.depth_m.isnan(), given.depth_m.isnan())
    assert torch.equal(result.rgb.isnan(), given.rgb.isnan())


def test_missing_takes_returns_away_and_touches_nothing_else():
    """Shares are uniform up to 0.2, so a tenth of all columns: standard error 0.01 over drives, times 3."""
    given = even()
    result = shaken(given, missing=0.2)
    gone = result.depth_m.isnan()
    assert float(gone.float().mean()) == pytest.approx(0.1, abs=0.03)
    assert torch.equal(result.depth_m[~gone], given.depth_m[~gone])
    assert torch.equal(result.rgb, given.rgb)


def test_the_same_draws_give_the_same_strips_and_others_give_others():
    """A killed run is taken up with the same bytes."""
    settings = {"light": 1.0, "tint": 0.3, "range": 0.03, "missing": 0.1}
    first, again, other = (shaken(strips(count=6), seed, 2, **settings) for seed in (0, 0, 1))
    for part in ("depth_m", "rgb"):
        one, two, three = (getattr(s, part).nan_to_num(-1) for s in (first, again, other))
        assert torch.equal(one, two) and not torch.equal(one, three)

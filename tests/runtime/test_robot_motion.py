"""The robot's prediction step against the one that was trained with."""

import numpy as np
import pytest
import torch

from learnfilter.filtering.grid_filter import lattice_of
from learnfilter.filtering.kernels import clear_paths
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.motion import predict as torch_predict
from learnfilter.runtime.motion import MotionNoise, clear_path, predict, shift_weights
from learnfilter.runtime.part import Part
from tests.shipping import rehearsed

MOTIONS = {
    "still": (0.0, 0.0, 0.0),
    "forward": (0.2, 0.0, 0.0),
    "whole cells": (0.5, 0.0, 0.0),
    "back and aside": (-0.31, 0.17, 0.1),
    "turn": (0.0, 0.0, 1.3),
    "turn right past a half": (0.05, 0.0, -3.1),
    "a long step": (2.3, 0.4, 0.2),
    "out of the site": (11.0, 0.0, 0.0),
}


@pytest.fixture(scope="module")
def belief() -> np.ndarray:
    """A rough belief over live poses."""
    site, _ = rehearsed()
    belief = np.random.default_rng(0).gamma(0.05, size=site.grid.shape) * site.live
    return (belief / belief.sum()).astype(np.float32)


def whole(part: Part) -> np.ndarray:
    """The belief on the whole lattice."""
    belief = np.zeros(rehearsed()[0].grid.shape, np.float32)
    belief[(slice(None), *part.window)] = part.planes
    return belief


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS)
def test_prediction_is_torchs(belief, motion):
    """Every mass arrives where the trained filter would have put it."""
    site, model = rehearsed()[0], MotionModel()
    with torch.no_grad():
        expected, _ = torch_predict(
            torch.from_numpy(belief)[None], torch.tensor([motion]), lattice_of(site), model
        )
    noise = MotionNoise(**model.settings()._asdict())
    found = whole(predict(Part(belief, 0, 0), np.array(motion, np.float32), site.grid, site.live, noise))
    # float32 shifts of 0.25 m cells are off by 1e-6 of a cell, and so is the mass that crosses an edge
    assert np.abs(found - expected[0].numpy()).sum() / 2 < 1e-5


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS)
def test_a_window_moves_like_the_whole(belief, motion):
    """Outside of it the belief is zero, so leaving that out changes nothing."""
    site, noise = rehearsed()[0], MotionNoise(0.05, 0.02, 0.05, 0.01)
    here = np.zeros(site.live.shape, bool)
    here[8:20, 5:16] = True
    some, odometry = Part(belief * here, 0, 0), np.array(motion, np.float32)
    found, expected = (
        whole(predict(part, odometry, site.grid, site.live, noise)) for part in (some.cropped(here), some)
    )
    np.testing.assert_allclose(found, expected, atol=1e-7)  # float32 sums in another order


def test_a_belief_that_drove_into_the_wall_starts_anew(belief):
    """Nothing arrives anywhere, so every live pose is as likely as another."""
    site, _ = rehearsed()
    lone = np.zeros_like(belief)
    lone[0, site.cells[0, 0], site.cells[0, 1]] = 1.0
    out = predict(
        Part(lone, 0, 0),
        np.array([-9.0, 0.0, 0.0], np.float32),
        site.grid,
        site.live,
        MotionNoise(0.05, 0.02, 0.01, 0.01),
    )
    expected = site.live / (site.live.sum() * site.grid.headings)
    np.testing.assert_allclose(whole(out), np.broadcast_to(expected, lone.shape), rtol=1e-5)  # float32


@pytest.mark.parametrize("shift", [(0.0, 0.0), (3.0, 0.0), (-2.4, 5.1), (0.4, -1.5), (40.0, -3.0)])
def test_the_way_is_clear_where_the_trained_filter_finds_it_clear(shift):
    """Same walls in the way of the same steps."""
    live = rehearsed()[0].live
    expected = clear_paths(live, *(np.array([s]) for s in shift))[0]
    np.testing.assert_array_equal(clear_path(live, *shift), expected)


@pytest.mark.parametrize("variance", [0.0, 0.1, 2.0])
def test_taps_move_mass_by_the_mean(variance):
    """Weights sum to one and their mean is the shift, whatever the noise."""
    mean, offsets = np.array([0.37]), np.arange(-12.0, 13.0)[None]
    weights = shift_weights(mean, np.array([variance]), offsets[:, 0], offsets.size)
    # float64 second differences
    assert (weights.sum(), (weights * offsets).sum()) == pytest.approx((1.0, 0.37), abs=1e-12)

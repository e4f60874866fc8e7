"""Weights in fewer bits: how far they may be off, and that calibration is worth it."""

import numpy as np
import pytest
import torch
from torch.nn import functional as F

from learnfilter.export.precision import LARGEST, input_moments, quantised, restored, stored
from learnfilter.export.robot import robot_model, with_arrays
from learnfilter.runtime.bundle import WEIGHTS
from tests.shipping import KINDS, model_of, rendered


def rows(channels: int = 5, width: int = 40) -> np.ndarray:
    return (
        np.random.default_rng(0).normal(size=(channels, width)) * np.geomspace(1e-3, 1e3, channels)[:, None]
    )


def test_bytes_are_right_to_half_a_step_inside_the_clip():
    """Rounded to the nearest; beyond the clip they stand at it."""
    weights = rows()
    codes, scales = quantised(weights, None)
    clip = LARGEST * scales[:, None]
    off = np.abs(codes * scales[:, None] - weights.clip(-clip, clip))
    assert (off <= scales[:, None] / 2 * (1 + 1e-5)).all()  # scales are float32


def test_every_channel_has_a_scale_of_its_own():
    """A small one is as exact, for its size, as a large one."""
    codes, scales = quantised(rows(), None)
    error = np.abs(codes * scales[:, None] - rows()).max(axis=1) / np.abs(rows()).max(axis=1)
    assert (error < 0.05).all()


def test_a_silent_channel_stays_silent():
    """As the last layers of an untrained matcher are."""
    codes, scales = quantised(np.zeros((2, 3)), np.eye(3))
    assert (codes == 0).all() and np.isfinite(scales).all()


def test_an_outlier_that_says_little_is_clipped():
    """A weight ten times the others on an input that is nearly zero: outputs are nearer than with max-abs."""
    rng = np.random.default_rng(1)
    weights, inputs = rng.normal(0, 0.1, (1, 32)), rng.normal(size=(2000, 32))
    weights[0, 0], inputs[:, 0] = 10.0, inputs[:, 0] * 1e-4
    codes, scales = quantised(weights, inputs.T @ inputs)
    widest = 10.0 / LARGEST
    plain = np.rint(weights / widest) * widest

    def error(found):
        return np.square(inputs @ (found - weights).T).sum()

    assert scales[0] < 0.5 * widest
    assert error(codes * scales[:, None]) < 0.5 * error(plain)


@pytest.mark.parametrize("layer", ["strip_in", "ring_mid", "ring_out"])
def test_moments_foretell_the_error_of_a_layers_output(layer, monkeypatch):
    """e' M e is what torch's own layer puts out differently, squared and summed."""
    model, (site, drives) = model_of("matcher"), rendered()
    moment = input_moments(model, site, drives[0])[f"{layer}.weight"]
    module = getattr(model, layer)
    off = torch.from_numpy(np.random.default_rng(0).normal(size=module.weight.shape).astype(np.float32))
    seen = []
    hook = module.register_forward_pre_hook(lambda module, taken: seen.append(taken[0]))
    input_moments(model, site, drives[0])
    hook.remove()
    differs = F.conv1d if module.weight.ndim == 3 else F.linear
    expected = sum(float(differs(x, off).double().square().sum()) for x in seen)
    flat = off.flatten(1).double().numpy()
    np.testing.assert_allclose(np.einsum("cm,mk,ck->", flat, moment, flat), expected, rtol=1e-4)  # float32


@pytest.mark.parametrize(
    ("precision", "share"),
    [("fp32", 0.0), ("fp16", 2.0**-11)],  # IEEE 754: half a unit in the last of 11 bits
)
def test_floats_are_right_to_their_last_bit(precision, share):
    """Nothing is scaled."""
    arrays = {name: array.astype(np.float32) for name, array in robot_model(model_of("matcher"))[1].items()}
    for name, found in restored(stored(arrays, precision, {})).items():
        tiny = 0.0 if precision == "fp32" else 2.0**-25  # half the smallest float16
        assert (np.abs(found - arrays[name]) <= share * np.abs(arrays[name]) + tiny).all()


def test_bytes_make_the_file_small(shipped):
    """A quarter, and the vectors and scales that stay floats."""
    sizes = [
        (shipped("matcher", precision) / WEIGHTS).stat().st_size for precision in ("fp32", "fp16", "int8")
    ]
    assert sizes[1] < 0.6 * sizes[0] and sizes[2] < 0.4 * sizes[0]


@pytest.mark.parametrize("kind", KINDS)
def test_a_model_takes_its_own_numbers_back(kind):
    """Named and shaped as they were given, and others change it."""
    model = model_of(kind)
    _, arrays = robot_model(model)
    again = robot_model(with_arrays(model, arrays))[1]
    doubled = robot_model(
        with_arrays(model, {name: np.asarray(2 * array) for name, array in arrays.items()})
    )[1]
    for name, array in arrays.items():
        np.testing.assert_array_equal(again[name], array)
        np.testing.assert_array_equal(doubled[name], 2 * array)
        np.testing.assert_array_equal(robot_model(model)[1][name], array)

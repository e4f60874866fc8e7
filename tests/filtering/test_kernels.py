"""Shifting planes by taps, and straight ways that stay clear, against SciPy and plain loops."""

import numpy as np
import pytest
import torch
from numpy.testing import assert_allclose, assert_array_equal
from scipy import ndimage
from torch.autograd import gradcheck

from learnfilter.filtering.kernels import clear_paths, shift_planes

RNG = np.random.default_rng(0)
PLANES = torch.from_numpy(RNG.random((3, 7, 9)))


def shifted(planes, offset_r, offset_c, weights_r, weights_c):
    planes = torch.as_tensor(planes)
    offsets = (torch.full((len(planes),), o, dtype=torch.int64) for o in (offset_r, offset_c))
    weights = (torch.tensor(w, dtype=torch.float64).expand(len(planes), -1) for w in (weights_r, weights_c))
    return shift_planes(planes, *offsets, *weights).numpy()


@pytest.mark.parametrize("row", [-8, -2, 0, 3])
@pytest.mark.parametrize("column", [-1, 0, 4, 10])
def test_one_tap_is_a_shift_that_loses_what_leaves(row, column):
    """SciPy's shift with zeros outside, beyond the plane's size too."""
    expected = [ndimage.shift(plane, (row, column), order=0, mode="constant") for plane in PLANES.numpy()]
    assert_allclose(shifted(PLANES, row, column, [1.0], [1.0]), expected)


def test_taps_are_a_convolution():
    """SciPy's convolve with the outer product of the weights; an odd number of taps centred on zero."""
    weights_r, weights_c = [0.1, 0.7, 0.2], [0.5, 0.2, 0.1, 0.1, 0.1]
    kernel = np.outer(weights_r, weights_c)
    expected = [ndimage.convolve(plane, kernel, mode="constant") for plane in PLANES.numpy()]
    assert_allclose(shifted(PLANES, -1, -2, weights_r, weights_c), expected)


def test_an_asymmetric_kernel_is_not_turned_round():
    """Delta at 0, offset 3, kernel (0.1, 0.7, 0.2): 0.1 at 2, 0.7 at 3, 0.2 at 4 (filterpy's documentation);
    a correlation would swap the ends."""
    plane = np.zeros((1, 1, 10))
    plane[0, 0, 0] = 1
    expected = [0, 0, 0.1, 0.7, 0.2, 0, 0, 0, 0, 0]
    assert_allclose(shifted(plane, 0, 2, [1.0], [0.1, 0.7, 0.2])[0, 0], expected)


def test_every_plane_has_its_own_taps():
    """Three planes, three shifts."""
    offsets = torch.tensor([-1, 0, 2])
    ones = torch.ones(3, 1, dtype=torch.float64)
    out = shift_planes(PLANES, torch.zeros(3, dtype=torch.int64), offsets, ones, ones).numpy()
    expected = [
        ndimage.shift(p, (0, o), order=0) for p, o in zip(PLANES.numpy(), offsets.tolist(), strict=True)
    ]
    assert_allclose(out, expected)


def test_gradients_are_those_of_finite_differences():
    """gradcheck in float64 for planes and both axes' weights; shifts that leave the plane included."""
    generator = torch.Generator().manual_seed(0)

    def drawn(*shape):
        return torch.rand(*shape, dtype=torch.float64, generator=generator, requires_grad=True)

    offset_r, offset_c = torch.tensor([-2, 3]), torch.tensor([0, -6])
    inputs = drawn(2, 4, 5), drawn(2, 3), drawn(2, 2)
    assert gradcheck(lambda p, r, c: shift_planes(p, offset_r, offset_c, r, c), inputs)


def test_a_clear_way_meets_live_cells_only():
    """A wall in column 3; four and a half cells to the right: cells 5 to 7 would be reached through it (7
    from 2 and from the wall itself), cell 8 from beside it; ways to cells before 5 start off the lattice."""
    live = np.ones((1, 9), bool)
    live[0, 3] = False
    clear = clear_paths(live, np.array([0.0]), np.array([4.5]))[0, 0]
    assert_array_equal(clear, [False] * 8 + [True])


@pytest.mark.parametrize("shift", [(3.0, 0.0), (0.0, -2.6), (2.4, 4.0)])
def test_in_an_open_hall_every_way_from_inside_is_clear(shift):
    """The way into a cell is clear if it starts on the lattice."""
    live = np.ones((8, 8), bool)
    clear = clear_paths(live, np.array([shift[0]]), np.array([shift[1]]))[0]
    r, c = np.indices(live.shape)
    starts_inside = (r >= shift[0]) & (r - shift[0] <= 7) & (c >= shift[1]) & (c - shift[1] <= 7)
    assert clear[starts_inside].all()

"""The product of strips with rings: plain loops, gradients, and the ring's wrap."""

import numpy as np
import pytest
import torch
from torch.autograd import gradcheck
from torch.testing import assert_close

from learnfilter.core.strip import RingLayout
from learnfilter.observe.product import match
from tests.oracles import ring_products


def layout_of(headings, per_heading, first, columns):
    return RingLayout(headings * per_heading, per_heading, 0.0, first, tuple(range(columns)))


def drawn(layout, channels=3, strips=2, cells=4, **options):
    generator = torch.Generator().manual_seed(0)
    phi = torch.randn(strips, layout.columns, channels, generator=generator, dtype=torch.float64, **options)
    psi = torch.randn(cells, layout.bearings, channels, generator=generator, dtype=torch.float64, **options)
    return phi, psi


# heads and bearings, where the strip begins, how wide it is: narrow, wrapping, a full circle, one heading
CASES = [(4, 2, 0, 3), (4, 2, -3, 5), (3, 4, 10, 12), (1, 6, -1, 2), (5, 1, -40, 4)]


@pytest.mark.parametrize("case", CASES)
def test_scores_are_sums_of_inner_products(case):
    """Window by window with NumPy's einsum."""
    layout = layout_of(*case)
    phi, psi = drawn(layout)
    expected = ring_products(phi.numpy(), psi.numpy(), layout.first, layout.bearings_per_heading, case[0])
    assert_close(match(phi, psi, layout), torch.from_numpy(expected))


@pytest.mark.parametrize("case", CASES)
def test_gradients_are_those_of_finite_differences(case):
    """gradcheck in float64, for strips and rings at once."""
    layout = layout_of(*case)
    phi, psi = drawn(layout, channels=2, requires_grad=True)
    assert gradcheck(lambda a, b: match(a, b, layout), (phi, psi))


def test_only_the_strip_may_need_a_gradient():
    """Rings of a frozen plan side."""
    layout = layout_of(4, 2, -1, 3)
    phi, psi = drawn(layout)
    phi.requires_grad_()
    match(phi, psi, layout).sum().backward()
    window = np.arange(layout.bearings)
    expected = sum(psi.numpy()[:, (h * 2 - 1 + window[:3]) % 8].sum(axis=0) for h in range(4))
    assert_close(phi.grad, torch.from_numpy(expected).expand_as(phi))

"""sRGB and linear light against the standard's numbers and another library."""

import colour as colour_science
import numpy as np
import pytest
from numpy.testing import assert_allclose

from learnfilter.core.colour import linear_to_srgb, srgb_to_linear

# IEC 61966-2-1:1999, evaluated by hand and with colour-science; eight digits are printed
PAIRS = [(0.1, 0.01002283), (0.2, 0.03310477), (0.5, 0.21404114), (0.75, 0.52252155), (1.0, 1.0), (0.0, 0.0)]
TO_PRINTED_DIGITS = 1e-8


@pytest.mark.parametrize(("srgb", "expected"), PAIRS)
def test_srgb_to_linear_gives_the_standards_numbers(srgb, expected):
    """Both branches, ends included."""
    assert_allclose(srgb_to_linear(srgb), expected, atol=TO_PRINTED_DIGITS)


@pytest.mark.parametrize(("linear", "expected"), [(0.01, 0.09985282), (0.18, 0.46135613), (0.5, 0.73535698)])
def test_linear_to_srgb_gives_the_standards_numbers(linear, expected):
    """The standard's inverse at three greys."""
    assert_allclose(linear_to_srgb(linear), expected, atol=TO_PRINTED_DIGITS)


def test_the_dark_branch_is_linear_up_to_its_end():
    """At 0.04045 the value is the straight line's, 0.04045 / 12.92."""
    assert_allclose(srgb_to_linear(0.04045), 0.04045 / 12.92, rtol=1e-12)


def test_mixing_black_and_white_gives_code_188():
    """Half the light of white is code 188 of 255, not 128 (the same standard)."""
    assert round(255 * float(linear_to_srgb(srgb_to_linear([0.0, 1.0]).mean()))) == 188


def test_every_code_survives_a_round_trip():
    """All 256 codes return to within the standard's own mismatch of its branches."""
    codes = np.arange(256) / 255
    assert_allclose(linear_to_srgb(srgb_to_linear(codes)), codes, atol=1e-7)


def test_agrees_with_a_colour_library_on_arrays():
    """Any shape, both directions, against colour-science."""
    values = np.random.default_rng(1).random((5, 7, 3))
    assert_allclose(srgb_to_linear(values), colour_science.models.eotf_sRGB(values), atol=1e-12)
    assert_allclose(linear_to_srgb(values), colour_science.models.eotf_inverse_sRGB(values), atol=1e-12)

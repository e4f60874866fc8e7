"""Axes have names and are held to them."""

import numpy as np
import pytest
import torch

from learnfilter.core.errors import ShapeError
from learnfilter.core.shapes import check


@pytest.mark.parametrize("make", [np.zeros, torch.zeros])
def test_letters_are_bound_to_sizes(make):
    """NumPy and torch alike; letters bound before stay bound."""
    assert check("belief", make((2, 3)), "h r", b=5) == {"h": 2, "r": 3, "b": 5}


@pytest.mark.parametrize(
    ("shape", "axes", "sizes"),
    [((2, 3), "h r c", {}), ((2, 3), "h", {}), ((2, 3), "h r", {"r": 4}), ((2, 3), "a a", {})],
)
def test_a_wrong_rank_or_a_clash_is_an_error_with_the_arrays_name(shape, axes, sizes):
    """Too few axes, too many, another size, one letter for two sizes."""
    with pytest.raises(ShapeError, match="belief"):
        check("belief", np.zeros(shape), axes, **sizes)


def test_an_axis_may_be_called_x():
    """Axis letters do not collide with the function's own parameters."""
    assert check("plane", np.zeros((2, 3)), "y x") == {"y": 2, "x": 3}

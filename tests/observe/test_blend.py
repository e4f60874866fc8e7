"""Exponents: what they pay for, and how they are trained."""

import pytest
import torch
from torch.testing import assert_close

from learnfilter.observe.blend import Blend
from learnfilter.observe.contract import ObservationModel
from tests.contracts.small import LAYOUT, colour, endpoint, score, small_site, strips


class Agreeing(ObservationModel):
    """Identical columns, each twice as likely under the first pose as under the second."""

    def __init__(self, columns):
        super().__init__()
        self.layout, self.columns = LAYOUT, columns

    def read(self, site):
        return None

    def scores(self, strips, features):
        return self.columns * torch.tensor([[[2.0], [1.0]]]).log()


@pytest.mark.parametrize(("exponent", "expected"), [(1.0, 0.9990243902), (0.1, 2 / 3)])
def test_an_exponent_takes_back_what_identical_columns_overstate(exponent, expected):
    """Ten copies of one reading with odds 2: naively 1024 to 1; with exponent 1/10 the 2 to 1 it is."""
    scores = Blend({"range": Agreeing(10)}, {"range": exponent})(None, None).detach()
    assert_close(float(torch.softmax(scores.flatten(), 0)[0]), expected, rtol=1e-6, atol=1e-6)


def test_a_blend_is_the_weighted_sum_of_its_parts():
    """End points at 0.5, colour at 2."""
    parts = {"endpoint": endpoint(), "colour": colour()}
    site, seen = small_site(), strips()
    expected = 0.5 * score(parts["endpoint"], seen, site) + 2 * score(parts["colour"], seen, site)
    actual = score(Blend(parts, {"endpoint": 0.5, "colour": 2.0}), seen, site)
    assert_close(actual, expected, rtol=1e-5, atol=1e-5)  # float32


def test_the_gradient_of_a_log_exponent_is_its_parts_share():
    """d/d log a of a L = a L."""
    model = Blend({"range": Agreeing(10)}, {"range": 0.3})
    model(None, None).sum().backward()
    assert_close(float(model.log_exponent["range"].grad), 0.3 * 10 * float(torch.tensor(2.0).log()))

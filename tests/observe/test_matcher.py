"""The matcher's own promises: silent where the plan is, and colour as the analytic model sees it."""

import pytest
import torch
from torch.testing import assert_close

from learnfilter.core.errors import ConfigError
from learnfilter.observe.contract import site_tensors
from learnfilter.observe.matcher import Matcher, MatcherShape
from tests.contracts.small import LAYOUT, birth, colour, score, small_site, strips, trained


def psi(model, **members):
    """Features of the small site's rings, some of what they know replaced."""
    site = site_tensors(small_site())._replace(**members)
    with torch.no_grad():
        return model.psi(*model.fixed_psi(site))


def test_a_trained_matchers_colour_channels_are_silent_where_no_finish_is_known():
    """Landmark features and the colour bias are exactly zero; range channels speak on."""
    model, site = trained(), site_tensors(small_site())
    features = psi(model, finish=torch.full_like(site.finish, len(site.palette) - 1))
    range_rank, colour_rank, _ = model.ranks
    assert not features[..., range_rank : range_rank + colour_rank].any()
    assert not features[..., -1].any()
    assert features[..., :range_rank].any()


def test_a_trained_matchers_range_channels_are_silent_where_a_ray_is_unsure():
    """Range features, extra features and the range bias are exactly zero; colour channels speak on."""
    model, site = trained(), site_tensors(small_site())
    features = psi(model, unsure=torch.ones_like(site.unsure))
    range_rank, colour_rank, extra = model.ranks
    after = range_rank + colour_rank
    assert not features[..., :range_rank].any()
    assert not features[..., after : after + extra + 1].any()
    assert features[..., range_rank:after].any()


def test_with_many_landmarks_colour_is_the_analytic_models():
    """Depth left out, 120 landmarks, a level of brightness taken out: the colour model times its exponent.

    A pose's sum of 32 columns differs by what the landmarks lack, below a twentieth of a nat.
    """
    start = birth(colour_rank=120)._replace(range_exponent=1e-9)
    seen = strips()
    model = Matcher(LAYOUT, start, MatcherShape(residual=False), torch.Generator())
    expected = start.colour_exponent * score(colour(), seen, small_site())
    assert float(expected.std()) > 0.5
    assert_close(score(model, seen, small_site()), expected, rtol=0, atol=0.05)


@pytest.mark.parametrize("members", [{"kernel": 4}, {"strip_hidden": 0}, {"extra_rank": -1}])
def test_impossible_sizes_are_refused(members):
    """An even kernel, no channels, a negative rank."""
    with pytest.raises(ConfigError):
        MatcherShape(**members)

"""A birth that knows nothing, against the fitted one that it stands in for."""

from dataclasses import replace

import numpy as np
import pytest
import torch

from learnfilter.core.seeds import stream
from learnfilter.observe.matcher import Matcher, MatcherShape
from learnfilter.training.analytic import without_knowledge
from tests.contracts.small import LAYOUT, birth, score, small_site, strips


@pytest.fixture(scope="module")
def pair():
    """The fitted birth and the ignorant one."""
    return birth(), without_knowledge(birth(), stream(0, "tests", "blank"))


def spread_of(birth_):
    """Standard deviation of scores over all poses of the small site, mean over strips; without residual."""
    model = Matcher(LAYOUT, birth_, MatcherShape(residual=False), torch.Generator().manual_seed(0))
    return float(score(model, strips(count=4), small_site()).flatten(1).std(1).mean())


def test_ignorance_has_the_sizes_of_knowledge(pair):
    """Otherwise it would be the sizes that a comparison measures."""
    fitted, blank = pair
    for part in ("range_factors", "colour_factors"):
        shapes = [[np.shape(table) for table in getattr(born, part)] for born in (fitted, blank)]
        assert shapes[0] == shapes[1]


def test_ignorance_shares_no_feature_with_knowledge(pair):
    """Nor does it have a normaliser to go with them."""
    fitted, blank = pair
    for name in ("measured", "expected"):
        tables = [getattr(born.range_factors, name) for born in pair]
        assert not np.isclose(*tables).all(axis=0).any()
    assert not np.allclose(fitted.colour_factors.root, blank.colour_factors.root)
    np.testing.assert_array_equal(blank.range_factors.bias, 0.0)


def test_features_of_neighbouring_nodes_stay_alike(pair):
    """At most WAVES = 4 waves over all nodes: a step changes a cosine by at most 2 pi 4 / (nodes - 1)."""
    for table in (pair[1].range_factors.measured, pair[1].range_factors.expected):
        assert np.abs(np.diff(table, axis=0)).max() <= 8 * np.pi / (len(table) - 1)


def test_ignorance_hardly_tells_poses_apart(pair):
    """Scores over a site vary by a fraction of a nat, a fifth of the fitted birth's at most."""
    fitted, blank = (spread_of(born) for born in pair)
    # 12 features of 32 columns, each a product of cosines (spread 1/2) at 0.02: sqrt(12 x 32) / 2 x 0.02 is
    # 0.2 nats if columns were independent; neighbours are not, which doubles it
    assert 0 < blank < min(0.5, fitted / 5)


def test_ignorance_too_is_silent_where_the_plan_is(pair):
    """Unsure behind every bearing and no finish known: the same for all poses."""
    rings = small_site()
    site = replace(rings, unsure=np.ones_like(rings.unsure), finish=np.full_like(rings.finish, -1))
    model = Matcher(LAYOUT, pair[1], MatcherShape(), torch.Generator().manual_seed(0))
    assert not score(model, strips(), site).any()


def test_a_sensor_without_colour_has_none_to_forget():
    """No colour factors before, none after."""
    bare = birth()._replace(colour_factors=None)
    assert without_knowledge(bare, stream(0, "tests", "bare")).colour_factors is None

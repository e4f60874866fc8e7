"""A matcher before any training filters like the analytic model it was born from."""

import numpy as np
import pytest
import torch

from learnfilter.app.grounds import Lattices, Rehearsal, make_grounds
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.observe.matcher import Matcher, MatcherShape
from learnfilter.sim.conditions import Conditions
from learnfilter.training.analytic import BirthSettings, birth_of, fit_analytic, make_blend

STRIP = Strip(even_strip(-43.59375, 2.8125, 32), 0.15, 6.0)
FAMILIES = ("offices", "aisles", "hall", "partitions")
# near those that tuning finds: after it a strip of 32 columns counts for about six
EXPONENTS = {"beam": 0.18, "colour": 0.1}


@pytest.fixture(scope="module")
def rehearsed():
    """Eight invented sites with stills, and models fitted to a drive on each."""
    layout = lay_on_ring(STRIP, 32, 4)
    lattices = Lattices(layout, 0.25, 32, 0.2, 6.0, "unsure", 0.2, 0.2)
    rehearsal = Rehearsal(FAMILIES, 8, 1, 16, 64, 8.0, 8.0, Conditions())
    grounds = make_grounds(rehearsal, STRIP, lattices, 0, "birth", lambda *told: None).grounds
    fits = fit_analytic(grounds, 6.0, np.random.default_rng(0))
    blend = make_blend("beam+colour", layout, fits)
    with torch.no_grad():
        for name, exponent in EXPONENTS.items():
            blend.log_exponent[name].fill_(np.log(exponent))
    return grounds, fits, blend


def one_strip_nats(model, grounds):
    """Mean nats of the true pose after one strip from an unknown start."""
    nats = []
    for ground in grounds:
        strips, truth = ground.stills
        with torch.no_grad():
            scores = model(strips, ground.site)
        log_belief = scores.flatten(1).log_softmax(1).view_as(scores)
        nats.append(-log_belief[torch.arange(len(scores)), truth.cell, truth.heading].mean())
    return float(torch.stack(nats).mean())


def born(rehearsed, **settings):
    """An untrained matcher, residual and all."""
    _, fits, blend = rehearsed
    birth = birth_of(blend, fits, BirthSettings(**settings))
    return Matcher(blend.layout, birth, MatcherShape(), torch.Generator().manual_seed(0))


def test_an_untrained_matcher_is_as_good_as_its_blend(rehearsed):
    """Within 0.05 nats of the true pose after one strip."""
    grounds, _, blend = rehearsed
    assert abs(one_strip_nats(born(rehearsed), grounds) - one_strip_nats(blend, grounds)) < 0.05


def test_without_factors_a_matcher_is_born_ignorant(rehearsed):
    """Ranks of zero leave the analytic start out: every pose scores zero."""
    (ground, *_), _, _ = rehearsed
    with torch.no_grad():
        scores = born(rehearsed, range_rank=0, colour_rank=0)(ground.stills[0], ground.site)
    assert float(scores.abs().max()) < 1e-4  # float32 normalisers

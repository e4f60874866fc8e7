"""The robot's models against those that were trained, and their sums against plain loops."""

import numpy as np
import pytest
import torch

from learnfilter.core.strip import RingLayout
from learnfilter.filtering.rollout import lay_strips
from learnfilter.observe.contract import pool_looks as torch_pool_looks
from learnfilter.runtime import load_bundle
from learnfilter.runtime.contract import pool_looks
from learnfilter.runtime.models import sum_along_rings
from tests.shipping import KINDS, model_of, rehearsed


@pytest.mark.parametrize("kind", KINDS)
def test_evidence_is_the_trained_models(shipped, kind):
    """Every live pose of a site gets the nats that torch gives it, strip by strip."""
    site, drive = rehearsed()
    strips = lay_strips(drive, site.layout, np.arange(4))
    with torch.no_grad():
        expected = model_of(kind)(strips, site).numpy()
    bundle = load_bundle(shipped(kind))
    features = bundle.model.read(bundle.site)
    pairs = zip(strips.depth_m.numpy(), strips.rgb.numpy(), strict=True)
    said = [bundle.model.likelihood(depth, rgb, features) for depth, rgb in pairs]
    found = np.stack([np.log(likelihood.T) + peak for likelihood, peak in said])
    # float32 sums over 16 columns of a few nats, each product of 28 channels
    np.testing.assert_allclose(found, expected, atol=1e-4)


def test_rings_are_summed_like_a_plain_loop():
    """One class a ring bearing, one table row a column."""
    rng = np.random.default_rng(0)
    layout = RingLayout(8, 2, 0.0, -1, (0, 1, 2))
    rows, ring = rng.normal(size=(3, 5)).astype(np.float32), rng.integers(0, 5, (8, 6))
    expected = [
        [sum(rows[w, ring[(2 * h - 1 + w) % 8, n]] for w in range(3)) for n in range(6)] for h in range(4)
    ]
    np.testing.assert_allclose(sum_along_rings(rows, ring, layout), expected, atol=1e-6)  # float32


@pytest.mark.parametrize("per_heading", [2, 4])
def test_looks_are_pooled_as_trained(per_heading):
    """One look a bin, or two that the bin owns."""
    layout = RingLayout(4 * per_heading, per_heading, 0.0, 0, (0,))
    scores = np.random.default_rng(0).normal(0, 9, (5, 4 * layout.looks)).astype(np.float32)
    expected = torch_pool_looks(torch.from_numpy(scores)[None], layout)[0]
    found = np.log(pool_looks(np.exp(scores.T), layout))
    np.testing.assert_allclose(found.T, expected.numpy(), atol=1e-5)  # float32

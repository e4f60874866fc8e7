"""Bayes' rule for the cells that can matter, against the rule written out."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from learnfilter.core.errors import ImpossibleEvidence
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.export.check import total_variation
from learnfilter.filtering.rollout import weighed_steps
from learnfilter.runtime import load_bundle
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.motion import predict
from learnfilter.runtime.part import Part
from learnfilter.runtime.weighing import Scale
from tests.oracles_weighing import bayes
from tests.shipping import rehearsed

GRID = PoseGrid(4, 6, 7, 0.25, 0.0, 0.0)
LIVE = np.ones(GRID.shape[1:], bool)
LIVE[3, 1:4] = LIVE[0, 0] = False
CELLS = np.argwhere(LIVE)
RULE = Weighing(0.4, 0.4, 1e-3, skip_below=1e-2, skip_ratio=100.0)
SETTLED = {(1, 2): 0.6, (1, 3): 0.3, (2, 2): 0.1}
NOTHING = np.zeros(0, np.float32)


class Said(RobotModel):
    """A model that says given nats [h n] and remembers how many cells it was asked about."""

    def __init__(self, nats: np.ndarray):
        self.layout, self.nats = RingLayout(4, 1, 0.0, 0, (0,)), nats.astype(np.float32)
        self.asked: list[int] = []

    def read(self, site, small=False):
        return None

    def scores(self, depth_m, rgb, features, cells):
        said = self.nats[:, cells]
        self.asked.append(said.shape[1])
        return said


def scale_of(model: RobotModel, weighing: Weighing = RULE) -> Scale:
    """The hand-made lattice, weighed by a model."""
    site = SimpleNamespace(grid=GRID, cells=CELLS)
    bundle = SimpleNamespace(site=site, model=model, weighing=weighing, manifest={"precision": "fp32"})
    return Scale.of(bundle)


def whole(part: Part, grid: PoseGrid = GRID) -> np.ndarray:
    """[h r c] the belief that a window stands for."""
    belief = np.zeros(grid.shape)
    belief[(slice(None), *part.window)] = part.planes
    return belief


def prior_of(where: dict[tuple[int, int], float]) -> np.ndarray:
    """[h r c] mass of some cells, under every heading alike; of none: the same everywhere."""
    prior = np.zeros(GRID.shape, np.float32)
    for cell, mass in where.items():
        prior[(slice(None), *cell)] = mass / GRID.headings
    return prior if where else np.broadcast_to(LIVE / np.float32(len(CELLS) * 4), GRID.shape)


def nats_for(cell: tuple[int, int]) -> np.ndarray:
    """[h r c] of a strip that speaks for one cell."""
    nats = np.random.default_rng(1).normal(-9.0, 1.0, GRID.shape)
    nats[(slice(None), *cell)] += 12.0
    return nats


@pytest.mark.parametrize(
    ("where", "speaks_for", "skips"),
    [(SETTLED, (1, 2), True), (SETTLED, (4, 5), False), ({}, (1, 2), False)],
    ids=["settled and right", "settled and wrong", "anywhere"],
)
def test_a_strip_is_weighed_by_the_rule(where, speaks_for, skips):
    """Belief, evidence, and whether the others are left out: as the rule says."""
    nats, prior = nats_for(speaks_for), prior_of(where)
    expected, log_expected, skipped = bayes(prior.astype(float), nats, LIVE, RULE)
    assert skipped == skips
    part, log_evidence = scale_of(Said(nats[:, LIVE])).weigh(Part(prior, 0, 0), NOTHING, NOTHING)
    # float32: a few roundings of each number
    np.testing.assert_allclose(whole(part), expected, rtol=1e-5, atol=1e-9)
    assert log_evidence == pytest.approx(log_expected, abs=1e-5)


BESIDE = 12  # rows 0 to 2 of columns 1 to 4; of row 3 the cells beneath are not live


@pytest.mark.parametrize(("speaks_for", "expected"), [((1, 2), [BESIDE]), ((4, 5), [BESIDE, len(CELLS)])])
def test_only_the_cells_that_can_matter_are_asked(speaks_for, expected):
    """The three that are believed in and those beside; then all, where the strip does not speak for those."""
    model = Said(nats_for(speaks_for)[:, LIVE])
    scale_of(model).weigh(Part(prior_of(SETTLED), 0, 0), NOTHING, NOTHING)
    assert model.asked == expected


@pytest.mark.parametrize("speaks_for", [(1, 2), (4, 5)])
def test_a_window_is_weighed_like_the_whole(speaks_for):
    """Wherever its corner lies: what is outside is not believed in."""
    scale, prior = scale_of(Said(nats_for(speaks_for)[:, LIVE])), Part(prior_of(SETTLED), 0, 0)
    window = Part(prior.planes[:, 1:4, 1:6], 1, 1)
    found, expected = (scale.weigh(part, NOTHING, NOTHING)[0] for part in (window, prior))
    np.testing.assert_array_equal(whole(found), whole(expected))


def test_a_share_of_ones_own_is_spread_and_leaves_no_cell_out():
    """As where the search begins anew."""
    nats, prior = nats_for((1, 2)), prior_of(SETTLED)
    expected, *_ = bayes(prior.astype(float), nats, LIVE, replace(RULE, floor=0.99, skip_below=0.0))
    part, _ = scale_of(Said(nats[:, LIVE])).weigh(Part(prior, 0, 0), NOTHING, NOTHING, 0.99)
    np.testing.assert_allclose(whole(part), expected, rtol=1e-5)  # float32


@pytest.mark.parametrize("value", [np.inf, np.nan])
def test_numbers_that_overflow_are_named(value):
    """A belief of NaN is never returned."""
    nats = nats_for((1, 2))
    nats[0, 1, 2] = value
    with pytest.raises(ImpossibleEvidence, match="numbers overflow"), np.errstate(invalid="ignore"):
        scale_of(Said(nats[:, LIVE])).weigh(Part(prior_of({}), 0, 0), NOTHING, NOTHING)


def test_every_live_pose_is_alike_at_first():
    """One over the number of poses, nothing elsewhere."""
    expected = np.broadcast_to(LIVE / (len(CELLS) * 4), GRID.shape)
    np.testing.assert_allclose(whole(scale_of(Said(nats_for((1, 2)))).nowhere()), expected, rtol=1e-6)


@pytest.mark.parametrize("kind", ["beam+colour", "matcher"])
def test_skipping_changes_next_to_nothing(shipped, kind):
    """Along a drive, from the same belief before each strip: 1e-3 of total variation is what is promised."""
    bundle, (site, drive) = load_bundle(shipped(kind)), rehearsed()
    scale, settings = Scale.of(bundle), bundle.weighing
    plain = replace(scale, bundle=replace(bundle, weighing=replace(settings, skip_below=0.0)))
    cut = weighed_steps(drive, site.layout, settings.after_m, settings.after_rad)
    part, apart, cells = scale.nowhere(), [], []
    for depth, rgb, moved in zip(cut.strips.depth_m, cut.strips.rgb, cut.odometry, strict=True):
        if cells:
            part = predict(part, moved.numpy(), site.grid, scale.live, bundle.noise)
        every, _ = plain.weigh(part, depth.numpy(), rgb.numpy())
        part, _ = scale.weigh(part, depth.numpy(), rgb.numpy())
        apart.append(total_variation(whole(part, site.grid), whole(every, site.grid)))
        cells.append(np.count_nonzero(part.planes.any(axis=0)))
    assert max(apart) <= 1e-3
    assert np.median(cells) < site.n_cells / 4  # so most was skipped

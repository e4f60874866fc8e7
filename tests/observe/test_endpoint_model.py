"""The end-point model: published densities, and what it ignores by design."""

import numpy as np
import pytest
import torch
from numpy.testing import assert_allclose

from learnfilter.core.strip import Strip, lay_on_ring
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.contract import Strips
from learnfilter.observe.endpoint import EndpointFit, EndpointModel, end_point_density, fit_end_points
from learnfilter.observe.fitting import Sample
from learnfilter.plan.floorplan import NO_FINISH, SHUT, WALL, FloorPlan
from tests.contracts.small import CIRCLE, FINE, LAYOUT, MAX_RANGE_M, mixture_fit, render, small_site, strips


@pytest.mark.parametrize(
    ("distance_m", "expected"),
    [(0, 1.8052403), (0.1, 1.5942940), (0.2, 1.0988683), (0.4, 0.2529593), (1, 0.0100067), (3, 0.0100000)],
)
def test_the_density_has_the_worked_values(distance_m, expected):
    """0.9 N(d; 0, 0.2) + 0.1 / 10 (Thrun, Burgard, Fox 2005, 6.4), to the printed digits."""
    assert_allclose(end_point_density(np.array(distance_m), EndpointFit(0.2, 0.9), 10.0), expected, atol=1e-7)


def test_a_reading_that_did_not_come_back_is_skipped():
    """Its column adds exactly nothing."""
    depth = torch.full((1, LAYOUT.columns), torch.nan)
    strips = Strips(depth, torch.full((1, LAYOUT.columns, 3), torch.nan), torch.tensor(LAYOUT.present()))
    assert not EndpointModel(LAYOUT, MAX_RANGE_M, EndpointFit())(strips, small_site()).any()


def test_scores_are_sums_over_end_points():
    """Straight from the raw columns' bearings: x + r cos(heading + bearing) looked up in the field, whose
    distances the model rounds to 2 cm; a reading that leaves the field counts as 2 m off."""
    site, seen, fit = small_site(), strips(), EndpointFit()
    bearings, size = np.asarray(CIRCLE.bearings_rad), 0.25
    depth = seen.depth_m.numpy()[:, np.argsort(LAYOUT.source)].astype(float)  # back in the raw order
    out = np.zeros((3, site.n_cells, 16))
    for h in range(16):
        for n, (row, column) in enumerate(site.cells):
            angle = h * 2 * np.pi / 16 + bearings
            i = np.floor(((row + 0.5) * 0.5 + depth * np.sin(angle)) / size)
            j = np.floor(((column + 0.5) * 0.5 + depth * np.cos(angle)) / size)
            inside = (i >= 0) & (i < site.field_m.shape[0]) & (j >= 0) & (j < site.field_m.shape[1])
            i, j = np.where(inside, i, 0).astype(int), np.where(inside, j, 0).astype(int)
            distance = np.where(inside, np.minimum(site.field_m[i, j], 2.0), 2.0)
            nats = np.log(end_point_density(0.02 * np.rint(distance / 0.02), fit, MAX_RANGE_M))
            out[:, n, h] = np.where(np.isnan(depth), 0, nats).sum(axis=1)
    actual = EndpointModel(LAYOUT, MAX_RANGE_M, fit)(seen, site).numpy()
    assert_allclose(actual, out, atol=1e-3)  # float32


def rooms():
    """A 6 x 6 m room, without and with a post between its middle and the right wall."""
    corners = np.array([(0, 0), (6, 0), (6, 6), (0, 6)], float)
    walls = np.hstack([corners, np.roll(corners, -1, axis=0)])
    for segments in (walls, np.vstack([walls, [(4.4, 2.9, 4.4, 3.6)]])):
        n = len(segments)
        yield FloorPlan(segments, [WALL] * n, [SHUT] * n, [NO_FINISH] * n, np.arange(n), seed=(1.0, 1.0))


@pytest.mark.parametrize(("kind", "changes"), [("endpoint", False), ("beam", True)])
def test_only_the_beam_model_minds_what_stands_in_between(kind, changes):
    """One column from (3.25, 3.25) to the wall at 6 m: a post half way blocks the beam; the end is on the
    wall as before."""
    layout = lay_on_ring(Strip((0.0,), 0.1, MAX_RANGE_M), 16, 2)
    model = {
        "endpoint": EndpointModel(layout, MAX_RANGE_M, EndpointFit()),
        "beam": BeamModel(layout, FINE, mixture_fit(FINE)),
    }[kind]
    strips = Strips(torch.tensor([[2.75]]), torch.full((1, 1, 3), torch.nan), torch.tensor([True]))
    scores = []
    for plan in rooms():
        site = render(plan, layout)
        row, column = site.grid.cell_of(3.25, 3.25)
        scores.append(float(model(strips, site)[0, site.index_of()[row, column], 0]))
    assert (scores[0] != scores[1]) == changes


def test_spread_and_share_are_found_again():
    """End points put at the depths the plan predicts, one in five replaced by a stray one: the share of
    hits comes out near 0.8 plus the strays that fall near walls by chance; distances are those of
    sub-cells of 0.25 m, hence a spread below that."""
    site, rng = small_site(), np.random.default_rng(0)
    cell, heading = rng.integers(0, site.n_cells, 200), rng.integers(0, 16, 200)
    bearing = (heading[:, None] * 2 + LAYOUT.first + np.arange(LAYOUT.columns)) % LAYOUT.bearings
    depth = site.range_m[cell[:, None], bearing].astype(float)
    depth[~np.isfinite(depth)] = np.nan
    stray = rng.random(depth.shape) < 0.2
    depth = np.where(stray, rng.uniform(0, MAX_RANGE_M, depth.shape), depth)
    sample = Sample(site, depth, np.full((*depth.shape, 3), np.nan), cell, heading)
    fit = fit_end_points([sample], MAX_RANGE_M)
    assert 0.78 < fit.hit_share < 0.95
    assert 0.05 < fit.spread_m < 0.25

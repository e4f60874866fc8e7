"""Laws that every observation model obeys, analytic or learned, trained or not."""

import json
from pathlib import Path

import numpy as np
import pytest
import torch
from torch.testing import assert_close

from learnfilter.core.errors import InputError
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.observe.contract import Strips
from learnfilter.observe.describe import describe, rebuild
from learnfilter.plan.readers import read_plan
from learnfilter.render import cast_rings
from learnfilter.sim import make_plan
from tests.contracts import small
from tests.contracts.small import LAYOUT, MODELS, PER_HEADING, TWO_LOOKS, altered, score, small_site, strips

TOY_WORLDS = Path(__file__).resolve().parents[2] / "toy_worlds"
FLOAT32 = {"rtol": 1e-4, "atol": 1e-3}  # sums of 32 float32 terms of up to 10 nats, in any order
# the end-point model reads a distance field, not rings
RING_READERS = sorted(set(MODELS) - {"endpoint"})
# analytic evidence, factored or not; training may let one column speak about its neighbours
ANALYTIC = sorted(set(MODELS) - {"trained matcher"})

every_model = pytest.mark.parametrize("name", sorted(MODELS))
both_layouts = pytest.mark.parametrize("layout", [LAYOUT, TWO_LOOKS], ids=["one look", "two looks"])


def roll_rings(site, by):
    """The site with its rings turned left by so many bearings."""
    rings = {key: np.roll(getattr(site, key), by, axis=1) for key in ("range_m", "unsure", "finish")}
    return altered(site, **rings)


@both_layouts
@pytest.mark.parametrize("name", RING_READERS)
def test_turning_what_is_around_turns_the_answer(name, layout):
    """Everything about a cell one heading bin further left: the same strip, one heading further on."""
    model, site = MODELS[name](layout), small_site(layout)
    turned = score(model, strips(), roll_rings(site, layout.bearings_per_heading))
    assert_close(turned, score(model, strips(), site).roll(1, dims=2), **FLOAT32)


@both_layouts
@pytest.mark.parametrize("name", ANALYTIC)
def test_turning_the_robot_rolls_the_heading_axis(name, layout):
    """A full circle of columns seen one heading bin further left belongs to one heading more.

    (The residual's convolutions do not close the circle of a strip, so a trained matcher is let off.)
    """
    model, site, seen, by = MODELS[name](layout), small_site(layout), strips(), layout.bearings_per_heading
    turned = seen._replace(depth_m=seen.depth_m.roll(-by, dims=1), rgb=seen.rgb.roll(-by, dims=1))
    assert_close(score(model, turned, site), score(model, seen, site).roll(1, dims=2), **FLOAT32)


@pytest.mark.parametrize("name", ANALYTIC)
def test_a_heading_bins_likelihood_is_the_mean_over_its_looks(name):
    """Two looks a quarter of a bin to either side of the centre: likelihoods of the strip as it would have
    been laid one ring bearing further right or left, under a centre alone.  The mean over a bin of what is
    linear between looks half a bin apart: the inner half takes 1/2 of either look, the outer quarters 3/4 of
    the own look and 1/4 of the next, which makes 7/16 and 1/16.  (One look a bin, of a
    layout of 16 headings, shows what a strip scores at ring bearings two apart; a strip rolled by one
    column fills the gap.)"""
    seen, headings = strips(), np.arange(0, 16, 2)
    one = MODELS[name](LAYOUT)
    right = seen._replace(depth_m=seen.depth_m.roll(1, dims=1), rgb=seen.rgb.roll(1, dims=1))
    left = seen._replace(depth_m=seen.depth_m.roll(-1, dims=1), rgb=seen.rgb.roll(-1, dims=1))
    high, low = (score(one, turned, small_site())[:, :, headings].double().exp() for turned in (right, left))
    expected = (7 * (low + high) + low.roll(-1, dims=2) + high.roll(1, dims=2)).log().float() - np.log(16)
    assert_close(score(MODELS[name](TWO_LOOKS), seen, small_site(TWO_LOOKS)), expected, **FLOAT32)


@every_model
def test_what_a_missing_column_holds_does_not_matter(name):
    """Blind columns are gaps whatever number stands in them."""
    present = LAYOUT.present().copy()
    present[5:12] = False
    seen = strips()._replace(present=torch.tensor(present))
    other = seen._replace(depth_m=seen.depth_m.clone(), rgb=seen.rgb.clone())
    other.depth_m[:, 5:12], other.rgb[:, 5:12] = 1.0, 0.5
    model = MODELS[name]()
    assert_close(score(model, other, small_site()), score(model, seen, small_site()), rtol=0, atol=0)


@every_model
def test_a_strip_of_missing_columns_is_no_evidence(name):
    """Nothing measured anywhere: exactly zero for every pose."""
    seen = strips()._replace(present=torch.zeros(LAYOUT.columns, dtype=torch.bool))
    assert not score(MODELS[name](), seen, small_site()).any()


@pytest.mark.parametrize("name", ANALYTIC)
def test_blind_columns_add_nothing(name):
    """Scores of the left and of the right half of a strip add up to those of the whole.

    A strip's own brightness is taken out over all of it, so colours are left out here.
    """
    model, seen = MODELS[name](), strips()
    seen = seen._replace(rgb=torch.full_like(seen.rgb, torch.nan))
    left = torch.arange(LAYOUT.columns) < 11
    halves = [score(model, seen._replace(present=half), small_site()) for half in (left, ~left)]
    assert_close(halves[0] + halves[1], score(model, seen, small_site()), **FLOAT32)


@pytest.mark.parametrize("name", ANALYTIC)
def test_columns_without_colour_are_no_evidence_of_colour(name):
    """A sensor that saw no colour scores a plan with finishes like one without."""
    model, seen = MODELS[name](), strips()
    seen = seen._replace(rgb=torch.full_like(seen.rgb, torch.nan))
    silent = altered(small_site(), finish=np.full_like(small_site().finish, -1))
    assert_close(score(model, seen, small_site()), score(model, seen, silent), rtol=0, atol=0)


@every_model
def test_a_strip_in_which_nothing_came_back_stays_finite(name):
    """All NaN: no return is a measurement too."""
    seen = strips()
    seen = seen._replace(
        depth_m=torch.full_like(seen.depth_m, torch.nan), rgb=torch.full_like(seen.rgb, torch.nan)
    )
    assert torch.isfinite(score(MODELS[name](), seen, small_site())).all()


@every_model
def test_a_batch_is_its_strips_one_by_one(name):
    """Strips do not see each other."""
    model, seen = MODELS[name](), strips(count=4)
    alone = [score(model, seen.at(slice(i, i + 1)), small_site()) for i in range(4)]
    assert_close(score(model, seen, small_site()), torch.cat(alone), **FLOAT32)


@pytest.mark.parametrize("name", ANALYTIC)
def test_where_no_finish_is_known_colour_is_no_evidence(name):
    """The plan is silent about surfaces: the same answer whatever the colours."""
    model, seen = MODELS[name](), strips()
    site = altered(small_site(), finish=np.full_like(small_site().finish, -1))
    other = seen._replace(rgb=strips(seed=5).rgb)
    assert_close(score(model, other, site), score(model, seen, site), rtol=0, atol=0)


@pytest.mark.parametrize("name", sorted(set(ANALYTIC) - {"endpoint"}))
def test_where_a_ray_is_unsure_range_is_no_evidence(name):
    """Behind every ray something may stand open: the same answer whatever the depths."""
    model, seen = MODELS[name](), strips()
    site = altered(small_site(), unsure=np.ones_like(small_site().unsure))
    other = seen._replace(depth_m=strips(seed=5).depth_m)
    assert_close(score(model, other, site), score(model, seen, site), rtol=0, atol=1e-5)


@pytest.mark.parametrize("name", RING_READERS)
def test_where_the_plan_knows_nothing_no_pose_is_preferred(name):
    """Unsure rays everywhere and no finish: the same score for every pose."""
    rings = small_site()
    site = altered(rings, unsure=np.ones_like(rings.unsure), finish=np.full_like(rings.finish, -1))
    scores = score(MODELS[name](), strips(), site).flatten(1)
    assert_close(scores, scores[:, :1].expand_as(scores), **FLOAT32)


@every_model
def test_a_described_model_is_rebuilt_alike(name):
    """Facts survive JSON, tensors are all the rest."""
    model = MODELS[name]()
    facts, tensors = describe(model)
    again = rebuild(LAYOUT, json.loads(json.dumps(facts)), tensors)
    assert_close(
        score(again, strips(), small_site()), score(model, strips(), small_site()), rtol=1e-6, atol=1e-6
    )  # exponents are kept as float32 and their logarithms taken again


@pytest.mark.parametrize("facts", [{}, {"kind": "crystal ball"}])
def test_a_model_of_an_unknown_kind_is_refused(facts):
    """By an error that names the known ones."""
    with pytest.raises(InputError, match="beam or endpoint"):
        rebuild(LAYOUT, facts, {})


@pytest.mark.parametrize("name", ["beam", "blend", "matcher"])
def test_what_the_plan_shows_at_a_pose_scores_best_there(name):
    """Rays cast along the raw columns' own bearings, 0, 90 and 225 degrees turned: the best of all poses is
    where they were cast."""
    site, step = small_site(), 2 * np.pi / 16
    for cell, turned in ((20, 0), (70, 90), (110, 225)):
        heading = round(np.radians(turned) / step)
        angles = np.radians(turned) + np.asarray(small.CIRCLE.bearings_rad)
        x, y = (site.grid.x_centres()[site.cells[cell, 1:]], site.grid.y_centres()[site.cells[cell, :1]])
        range_m, _, finish = cast_rings(small.small_plan(), x, y, angles, small.MAX_RANGE_M)
        rgb = np.where(finish[..., None] >= 0, site.palette[finish], np.nan)
        depth, rgb = LAYOUT.lay(range_m), LAYOUT.lay(rgb, axis=1)
        seen = Strips(
            torch.tensor(depth), torch.tensor(rgb, dtype=torch.float32), torch.tensor(LAYOUT.present())
        )
        scores = score(MODELS[name](), seen, site)[0]
        assert np.unravel_index(int(scores.argmax()), scores.shape) == (cell, heading)


def twins(site, cell, heading):
    """Cell number and heading of the four images of a pose under quarter turns of a square grid."""
    index, (row, column), size = site.index_of(), site.cells[cell], site.grid.rows - 1
    for _ in range(4):
        yield index[row, column], heading
        row, column, heading = column, size - row, (heading + site.grid.headings // 4) % site.grid.headings


@every_model
def test_twins_in_a_square_room_get_equal_scores(name):
    """Quarter turns about the middle change nothing in a 4 x 4 m room, so no strip tells the four images
    of any pose apart (group invariance)."""
    site = small.render(read_plan(TOY_WORLDS / "square_room.geojson"))
    scores = score(MODELS[name](), strips(), site)
    for cell, heading in np.ndindex(site.n_cells, site.grid.headings):
        images = torch.stack([scores[:, c, h] for c, h in twins(site, cell, heading)])
        assert_close(images, images[:1].expand_as(images), **FLOAT32)


@every_model
def test_a_mirror_image_is_no_twin(name):
    """The strip from (W - x, y, pi - heading) is this one reversed; a model that cannot tell the two apart
    ignores the order of columns.  A 90 degree strip, so that order matters at the true pose."""
    layout = lay_on_ring(Strip(even_strip(-39.0, 11.25, 8), 0.1, small.MAX_RANGE_M), 16, PER_HEADING)
    site = small.render(read_plan(TOY_WORLDS / "square_room_red_wall.geojson"), layout)
    cell = site.index_of()[4, 3]
    mirrored = site.index_of()[4, site.grid.columns - 1 - 3]
    heading, other = 13, (8 - 13) % 16
    bearing = (heading * PER_HEADING + layout.first + np.arange(layout.columns)) % layout.bearings
    colours, _ = site.colour()
    seen = strips(count=1, layout=layout, missing=0)._replace(
        depth_m=torch.tensor(site.range_m[cell, bearing])[None],
        rgb=torch.tensor(colours[cell, bearing])[None],
    )
    scores = score(MODELS[name](layout), seen, site)[0]
    assert abs(float(scores[cell, heading] - scores[mirrored, other])) > 0.05


@pytest.mark.parametrize("name", RING_READERS)
def test_twin_wings_are_never_told_apart(name):
    """A plan that a half turn leaves as it is (check_values R9, R10): every pose and its twin are equally
    likely, whatever the strip, so the belief stays split and nobody may claim to know the wing."""
    site = small.render(make_plan("wings", stream(0, "wings"), 12.0, 10.0))
    scores = score(MODELS[name](LAYOUT), strips(), site)
    twins = scores.flip(1).roll(LAYOUT.bearings // LAYOUT.bearings_per_heading // 2, dims=2)
    assert_close(scores, twins, **FLOAT32)
    assert float(scores.std()) > 0.01

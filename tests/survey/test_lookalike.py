"""Surveys of rooms whose look-alikes are known from their symmetry."""

import numpy as np
import pytest

from learnfilter.core.errors import ConfigError, ShapeError
from learnfilter.core.poses import wrap
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.plan import read_plan
from learnfilter.render import grid_for, render_site
from learnfilter.survey import RingComparison, survey_site
from tests.survey.rooms import room

ALL_ROUND = 128  # columns: the full circle, so that only symmetry is left to confuse poses
# each column counts: views differ by 3 nats as soon as a few columns do
SHARP = RingComparison(spread_m=0.03, growth_per_m=0.0, independent_rad=1e-6)


def survey(name, columns=ALL_ROUND, comparison=SHARP, **options):
    site = room(name, columns)
    options = {"budget": 80, "rng": stream(0, "survey")} | options
    return site, survey_site(site, comparison.of(site), **options)


@pytest.mark.parametrize(
    ("name", "twins"), [("square_room", 3), ("oblong_room", 1), ("square_room_red_wall", 0)]
)
def test_every_pose_has_the_twins_of_its_room_s_symmetry(name, twins):
    """Rotation group of the square: 4; of the oblong: 2; of one red wall: 1 (toy_worlds/README.md)."""
    np.testing.assert_array_equal(survey(name)[1].alike, twins)


@pytest.mark.parametrize(("name", "fold"), [("square_room", 4), ("oblong_room", 2)])
def test_one_strip_leaves_no_more_than_its_share_at_the_true_pose(name, fold):
    """n twins share the posterior alike: 1/n at most, and an entropy of ln n at least."""
    looks = survey(name)[1].looks
    assert looks.located.max() <= 1 / fold + 1e-6
    assert looks.entropy.min() >= np.log(fold) - 1e-6


def test_twins_have_equal_evidence_and_equal_mass():
    """The gap is zero and the mass ratio one, up to rounding of ranges to nodes."""
    links = survey("square_room")[1].links
    np.testing.assert_allclose(links.gap_nats, 0, atol=0.5)  # 128 columns, a few rounded to the next node
    np.testing.assert_allclose(links.ratio, 1, atol=0.5)


def test_the_twin_of_an_oblong_room_is_half_a_turn_away():
    """(x, y, heading) -> (4 - x, 3 - y, heading + pi)."""
    site, found = survey("oblong_room")
    links, looks, grid = found.links, found.looks, site.grid
    own, other = site.cells[looks.cell[links.sample]], site.cells[links.cell]
    np.testing.assert_allclose(grid.x_centres()[own[:, 1]] + grid.x_centres()[other[:, 1]], 4, atol=1e-9)
    np.testing.assert_allclose(grid.y_centres()[own[:, 0]] + grid.y_centres()[other[:, 0]], 3, atol=1e-9)
    turned = grid.heading_centres()[links.heading] - grid.heading_centres()[looks.heading[links.sample]]
    np.testing.assert_allclose(np.abs(wrap(turned)), np.pi, atol=1e-9)


@pytest.mark.parametrize("name", ["square_room", "oblong_room"])
def test_no_move_tells_a_symmetric_room_s_poses_apart(name):
    """With a camera that sees a quarter of the room, and room for noise: still for ever."""
    _, found = survey(name, 32, RingComparison())
    assert found.groups[0].for_ever


def test_a_red_wall_is_found_by_turning():
    """What a camera cannot tell facing three white walls it can once it looks round."""
    _, found = survey("square_room_red_wall", 32)
    assert len(found.links.sample) > 0 and found.groups[0].move_m == 0


def test_a_group_covers_the_symmetric_room():
    """Everything in the square looks like something else: 196 cells of 0.0625 m2, four-fold."""
    group = survey("square_room")[1].groups[0]
    assert (group.fold, group.share, len(group.areas)) == (4, pytest.approx(1), 1)
    assert group.area_m2 == pytest.approx(12.25)


def test_ambiguity_is_what_is_not_located():
    """Three quarters at least in every live cell of the square room, nothing said elsewhere."""
    site, found = survey("square_room")
    assert np.isnan(found.ambiguity[~site.live]).all()
    assert found.ambiguity[site.live].min() >= 0.75 - 1e-6


@pytest.fixture(scope="module")
def coarse():
    """The oblong room on a lattice of half metres, and its survey pose by pose."""
    site = room("oblong_room", 32, 0.5, 16)
    return site, survey_site(site, RingComparison().of(site), budget=10_000, most_groups=0, rng=stream(0))


def test_a_small_site_is_surveyed_pose_by_pose(coarse):
    """With budget enough every live pose is taken once and weighs the same."""
    site, found = coarse
    assert found.exhaustive
    assert len(set(zip(found.looks.cell, found.looks.heading, strict=True))) == site.n_cells * 16
    np.testing.assert_allclose(found.looks.weight, 1 / site.n_cells / 16)


@pytest.mark.parametrize("budget", [1, 7, 64, 500])
def test_a_sample_stands_for_the_whole_site_within_its_budget(budget):
    """Weights sum to one, and every live cell gets a value."""
    site, found = survey("oblong_room", 32, budget=budget)
    assert len(found.looks.cell) <= budget
    assert found.looks.weight.sum() == pytest.approx(1)
    assert np.isfinite(found.ambiguity[site.live]).all()


def test_a_sampled_survey_agrees_with_the_whole_one(coarse):
    """Located share of all poses against a stratified sample of a quarter of them."""
    site, whole = coarse
    part = survey_site(site, RingComparison().of(site), budget=160, most_groups=0, rng=stream(1))
    # standard error: the poses' own spread over the root of their number, strata ignored
    error = whole.looks.located.std() / np.sqrt(len(part.looks.cell))
    assert not part.exhaustive
    assert part.located_share == pytest.approx(whole.located_share, abs=3 * error)


def test_the_same_seed_gives_the_same_survey():
    """All freedom is the generator's."""
    first, second = (survey("oblong_room", 32)[1] for _ in range(2))
    np.testing.assert_array_equal(first.looks.cell, second.looks.cell)
    np.testing.assert_array_equal(first.looks.located, second.looks.located)


def test_evidence_of_another_site_is_refused():
    """Before numbers of the wrong cells are believed."""
    with pytest.raises(ShapeError, match="evidence"):
        survey_site(room("square_room"), SHARP.of(room("oblong_room")), rng=stream(0))


def test_a_budget_of_nothing_is_refused():
    """Nothing would be surveyed."""
    with pytest.raises(ConfigError):
        survey("square_room", budget=0)


def test_a_real_hotel_corridor_has_many_look_alikes(shared_data):
    """WRLD's Westport House, floor 3 (CC BY 4.0): like rooms along a corridor, on a plan without colours."""
    plan = read_plan(shared_data / "plans" / "westport-house-floor-3.geojson")
    layout = lay_on_ring(Strip(even_strip(-43.6, 2.8125, 32)), 32, 4)
    site = render_site(plan, layout, grid_for(plan, 32, 0.5), robot_radius_m=0.25, max_range_m=6.0)
    found = survey_site(site, RingComparison().of(site), budget=64, most_groups=1, rng=stream(0))
    assert found.alike_share > 0.8
    assert len(found.groups[0].areas) > 5  # in many rooms, not in one

"""Rings of small rooms whose every range can be worked out by hand."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from learnfilter.core.errors import ConfigError, ShapeError
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.plan.floorplan import DOOR, OPEN, SHUT, SOLID, UNKNOWN, WINDOW, Finish
from learnfilter.render.live import grid_for
from learnfilter.render.rings import cast_rings, render_site, site_key
from tests.render.shapes import plan_of, rectangle, walls

LAYOUT = lay_on_ring(Strip(even_strip(-42.1875, 5.625, 16)), 16, 4)
ROOM = walls(rectangle(0, 0, 4, 3))
SETTINGS = {"robot_radius_m": 0.25, "max_range_m": 10.0}


def render(plan, **settings):
    return render_site(plan, LAYOUT, grid_for(plan, 16, 0.25), **{**SETTINGS, **settings})


def ahead(plan, windows="unsure", max_range_m=10.0):
    """What one ray from (1, 1) along +x meets: range, unsure, finish."""
    one = (np.array([1.0]), np.array([1.0]), np.array([0.0]), max_range_m, windows)
    return tuple(array.item() for array in cast_rings(plan, *one))


def test_rings_of_a_rectangle_follow_the_closed_form():
    """Every ray of every live cell: the nearer of (W - x) / cos and (H - y) / sin."""
    site = render(ROOM)
    angle = LAYOUT.ring_angles()
    x = site.grid.x_centres()[site.cells[:, 1]][:, None]
    y = site.grid.y_centres()[site.cells[:, 0]][:, None]
    with np.errstate(divide="ignore"):
        to_side = np.where(np.cos(angle) > 0, 4 - x, -x) / np.cos(angle)
        to_end = np.where(np.sin(angle) > 0, 3 - y, -y) / np.sin(angle)
    assert_allclose(site.range_m, np.minimum(to_side, to_end), rtol=1.2e-7)  # float32


def test_a_half_turn_of_a_rectangle_rolls_its_rings_by_half():
    """Cells that are each other's image under a half turn see the same, rolled by P / 2."""
    site = render(ROOM)
    images = np.roll(site.range_m[::-1], LAYOUT.bearings // 2, axis=1)
    assert_allclose(site.range_m, images, rtol=3e-7)  # two float32 roundings


def test_arrays_of_a_site_fit_each_other():
    """Cells row-major and as many as live ones, rings P wide, the field two sub-cells a cell."""
    site = render(ROOM)
    assert_array_equal(site.cells, np.argwhere(site.live))
    assert site.range_m.shape == site.unsure.shape == site.finish.shape == (140, 64)
    assert site.field_m.shape == (28, 36)
    assert (site.range_m.dtype, site.finish.dtype, site.unsure.dtype) == (np.float32, np.int16, bool)


@pytest.mark.parametrize(
    ("said", "windows", "expected"),
    [
        ({"kind": DOOR, "state": SHUT, "finish": 1}, "unsure", (1.0, False, 1)),
        ({"kind": DOOR, "state": OPEN, "finish": 1}, "unsure", (3.0, False, 0)),
        ({"kind": DOOR, "state": UNKNOWN, "finish": 1}, "unsure", (1.0, True, -1)),
        ({"kind": WINDOW, "finish": 1}, "unsure", (1.0, True, -1)),
        ({"kind": WINDOW, "finish": 1}, "solid", (1.0, False, 1)),
        ({"kind": WINDOW, "finish": 1}, "clear", (3.0, False, 0)),
        ({"kind": SOLID, "finish": 1}, "unsure", (1.0, False, 1)),
    ],
)
def test_what_stands_before_a_wall_decides_range_and_evidence(said, windows, expected):
    """A thing at 1 m, the room's wall (finish 0) at 3 m."""
    plan = plan_of((rectangle(0, 0, 4, 3), {"finish": 0}), ([2, 0, 2, 3], said))
    assert ahead(plan, windows) == expected


def test_a_wall_before_an_unknown_door_is_certain():
    """What is behind the wall does not matter."""
    plan = plan_of((rectangle(0, 0, 4, 3), {}), ([4.2, 0, 4.2, 3], {"kind": DOOR, "state": UNKNOWN}))
    assert ahead(plan) == (3.0, False, -1)


def test_a_door_drawn_onto_a_wall_hides_nothing():
    """A plan that draws both says that there is a wall."""
    plan = plan_of((rectangle(0, 0, 4, 3), {"finish": 0}), ([4, 0, 4, 3], {"kind": DOOR, "state": UNKNOWN}))
    assert ahead(plan) == (3.0, False, 0)


def test_an_unknown_door_out_of_reach_is_nothing():
    """Door at 1 m, sensor good for 0.8 m: nothing comes back, and that is certain."""
    plan = plan_of((rectangle(0, 0, 4, 3), {}), ([2, 0, 2, 3], {"kind": DOOR, "state": UNKNOWN}))
    assert ahead(plan, max_range_m=0.8) == (np.inf, False, -1)


@pytest.mark.parametrize("closing", [[], [(2.0, -1.0)]])
def test_unmapped_area_stops_rays_without_evidence(closing):
    """Its edge is at 1 m, whether or not the outline repeats its first point."""
    edge = np.array([(2.0, -1.0), (9.0, -1.0), (9.0, 9.0), (2.0, 9.0), *closing])
    assert ahead(walls(rectangle(0, 0, 4, 3), unmapped=(edge,))) == (1.0, True, -1)


def test_finishes_reach_the_site_as_linear_light():
    """sRGB 0.5 is 0.21404114 of white's light (IEC 61966-2-1)."""
    plan = plan_of((rectangle(0, 0, 4, 3), {"finish": 0}), finishes=(Finish("putty", (0.5, 1.0, 0.0)),))
    colour, known = render(plan).colour()
    assert known.all()
    assert_allclose(colour[3, 5], [0.21404114, 1.0, 0.0], rtol=1.2e-7)  # float32


def test_a_plan_without_finishes_has_no_known_colour():
    """Depth only: an empty palette serves."""
    site = render(ROOM)
    colour, known = site.colour()
    assert site.palette.shape == (0, 3)
    assert not known.any()
    assert not colour.any()


CHANGES = {
    "plan": {"plan": walls(rectangle(0, 0, 4, 3.001))},
    "layout": {"layout": replace(LAYOUT, phase_rad=0.01)},
    "grid": {"grid": grid_for(ROOM, 16, 0.2)},
    "radius": {"robot_radius_m": 0.2},
    "range": {"max_range_m": 9.0},
    "windows": {"windows": "clear"},
    "scale": {"field_scale": 3},
}
BASE = {
    "plan": ROOM,
    "layout": LAYOUT,
    "grid": grid_for(ROOM, 16, 0.25),
    "windows": "unsure",
    "field_scale": 2,
    **SETTINGS,
}


@pytest.mark.parametrize("change", CHANGES)
def test_every_setting_changes_the_key(change):
    """A site rendered otherwise is another site."""
    assert site_key(**{**BASE, **CHANGES[change]}) != site_key(**BASE)


def test_equal_inputs_give_an_equal_key():
    """Built twice, named differently."""
    same = replace(walls(rectangle(0, 0, 4, 3)), name="the annex")
    assert site_key(**{**BASE, "plan": same}) == site_key(**BASE)


def test_a_layout_for_other_headings_is_refused():
    """16 headings in the layout, 8 in the grid."""
    with pytest.raises(ShapeError):
        render_site(ROOM, LAYOUT, grid_for(ROOM, 8, 0.25), **SETTINGS)


@pytest.mark.parametrize("wrong", [{"windows": "dirty"}, {"max_range_m": 0.0}, {"field_scale": 0}])
def test_settings_out_of_range_are_refused(wrong):
    """Each by name."""
    with pytest.raises(ConfigError, match=next(iter(wrong))):
        render(ROOM, **wrong)

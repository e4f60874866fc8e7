"""Sites kept on disk."""

from dataclasses import replace

import pytest
from numpy.testing import assert_array_equal

from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.plan.floorplan import Finish
from learnfilter.render import cache
from learnfilter.render.live import grid_for
from learnfilter.render.rings import render_site
from tests.render.shapes import plan_of, rectangle

PLAN = plan_of((rectangle(0, 0, 4, 3), {"finish": 0}), finishes=(Finish("putty", (0.7, 0.6, 0.5)),))
LAYOUT = lay_on_ring(Strip(even_strip(-40, 10, 9)), 9, 4)
GRID = grid_for(PLAN, 9, 0.25)
SETTINGS = {"robot_radius_m": 0.25, "max_range_m": 10.0}
FRESH = render_site(PLAN, LAYOUT, GRID, **SETTINGS)


def remembered(folder, plan=PLAN, **settings):
    return cache.cached_site(folder, plan, LAYOUT, GRID, **{**SETTINGS, **settings})


def assert_same(site, expected):
    for name in cache.ARRAYS:
        assert getattr(site, name).dtype == getattr(expected, name).dtype
        assert_array_equal(getattr(site, name), getattr(expected, name))
    for name in ("name", "grid", "layout", "max_range_m", "field_scale", "key"):
        assert getattr(site, name) == getattr(expected, name)


@pytest.fixture
def no_rendering(monkeypatch):
    """Whoever renders now fails."""

    def refuse(*args, **kwargs):
        raise AssertionError("rendered again")

    return lambda: monkeypatch.setattr(cache, "render_site", refuse)


def test_a_remembered_site_is_not_rendered_again(tmp_path, no_rendering):
    """The second call reads what the first one kept, equal to the last bit."""
    remembered(tmp_path / "sites")
    no_rendering()
    assert_same(remembered(tmp_path / "sites"), FRESH)


def test_a_renamed_plan_keeps_its_rings_under_its_new_name(tmp_path, no_rendering):
    """The name is no part of what a robot sees."""
    remembered(tmp_path)
    no_rendering()
    assert remembered(tmp_path, replace(PLAN, name="annex")).name == "annex"


def test_other_settings_are_another_file(tmp_path):
    """Nothing of one site leaks into another."""
    remembered(tmp_path)
    assert_same(
        remembered(tmp_path, max_range_m=2.0),
        render_site(PLAN, LAYOUT, GRID, robot_radius_m=0.25, max_range_m=2.0),
    )
    assert len(list(tmp_path.iterdir())) == 2


def cut_short(data):
    return data[: len(data) // 2]


def flip_a_late_bit(data):
    return data[:-10] + bytes([data[-10] ^ 1]) + data[-9:]


def empty(data):
    return b""


@pytest.mark.parametrize("damage", [cut_short, flip_a_late_bit, empty])
def test_a_damaged_file_is_rendered_anew_and_replaced(tmp_path, no_rendering, damage):
    """Whatever happened to it, the caller gets the right site, and the file is whole again."""
    remembered(tmp_path)
    (file,) = tmp_path.iterdir()
    file.write_bytes(damage(file.read_bytes()))
    assert_same(remembered(tmp_path), FRESH)
    no_rendering()
    assert_same(remembered(tmp_path), FRESH)


def test_a_file_without_the_arrays_is_rendered_anew(tmp_path):
    """A valid container of something else under the same name."""
    cache.save_file({"cells": FRESH.cells}, tmp_path / f"{FRESH.key}.safetensors")
    assert_same(remembered(tmp_path), FRESH)

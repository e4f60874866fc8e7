"""Settings: types, ranges, and that the shipped files fit the classes."""

from pathlib import Path

import numpy as np
import pytest
from omegaconf import OmegaConf
from PIL import Image

from learnfilter.app.build import build_conditions, build_footprint, build_motions, build_plan, build_strip
from learnfilter.app.command import compose_settings
from learnfilter.app.config import GridConfig, MotionConfig, StripConfig, flat, typed
from learnfilter.app.mover_config import MoverConfig
from learnfilter.app.paths import data_dir
from learnfilter.app.verbs import VERBS
from learnfilter.core.errors import ConfigError, PlanError
from learnfilter.core.strip import lay_on_ring
from learnfilter.runtime.moves import MOTIONS, Footprint
from learnfilter.sim.conditions import Conditions

CONFIGS = data_dir("configs")
GROUPS = {"strip": StripConfig, "grid": GridConfig, "motion": MotionConfig, "mover": MoverConfig}


def options(group: str) -> list[str]:
    return sorted(path.stem for path in (CONFIGS / group).glob("*.yaml"))


def conditions_of(*overrides: str) -> dict[str, Conditions]:
    """What a study is made under."""
    settings = typed(compose_settings("ablate", list(overrides)), VERBS["ablate"])
    return {name: build_conditions(condition) for name, condition in settings.conditions.items()}


def strip(**changes: object) -> StripConfig:
    return typed(
        OmegaConf.merge(OmegaConf.load(CONFIGS / "strip" / "depth-colour-90.yaml"), changes), StripConfig
    )


@pytest.mark.parametrize(("group", "option"), [(g, o) for g in GROUPS for o in options(g)])
def test_every_shipped_option_is_valid(group, option):
    """A settings file that does not fit its class would fail only in a user's hands."""
    typed(compose_settings("train", [f"{group}={option}"])[group], GROUPS[group])


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_settings_for_all_its_keys(verb):
    """Defaults live in the files alone, so each key must stand there."""
    plan = "site.file=some.geojson"
    given = {
        "replay": [plan, "bundle=some", "drive=some.csv"],
        "label": [plan, "drive=some.csv"],
        "verify": ["bundle=some"],
    }
    composed = compose_settings(verb, given.get(verb, [plan]))
    assert "???" not in flat(OmegaConf.to_container(composed)).values()
    typed(composed, VERBS[verb])


@pytest.mark.parametrize(
    ("changes", "place"),
    [
        ({"columns": 0}, "strip.columns"),
        ({"max_range_m": 0.1}, "strip.max_range_m"),
        ({"min_range_m": -1.0}, "strip.min_range_m"),
        ({"bearing_step_deg": 0.0}, "strip.bearing_step_deg"),
        ({"bearings_deg": [0.0, 1.0]}, "strip.bearings_deg"),
        ({"blind": [32]}, "strip.blind"),
        ({"depth_kind": "perpendicular"}, "strip.depth_kind"),
    ],
)
def test_a_value_out_of_range_is_named_by_its_whole_key(changes, place):
    """The message says which setting to mend."""
    with pytest.raises(ConfigError) as raised:
        strip(**changes)
    assert raised.value.place == place


@pytest.mark.parametrize("changes", [{"colums": 3}, {"columns": "many"}])
def test_a_misspelt_key_and_a_wrong_type_are_refused(changes):
    """Neither is passed over in silence."""
    with pytest.raises(ConfigError):
        strip(**changes)


def test_the_colour_strip_looks_symmetrically_over_90_degrees_and_lies_on_the_default_ring():
    """32 columns of 360/128 degrees: every column serves one ring bearing, the middle is straight ahead."""
    sensor = build_strip(strip())
    assert sensor.bearings_rad[0] == pytest.approx(
        -sensor.bearings_rad[-1], abs=1e-12
    )  # exact but for rounding
    assert lay_on_ring(sensor, headings=32, bearings_per_heading=4).source == tuple(range(32))


def mover(**changes: object) -> MoverConfig:
    shipped = compose_settings("train", ["mover=policy"]).mover
    return typed(OmegaConf.merge(shipped, changes), MoverConfig)


def test_the_shipped_mover_is_what_movers_take_for_granted():
    """The same motions to 1e-12, and the same margins."""
    np.testing.assert_allclose(build_motions(mover()), MOTIONS, rtol=0, atol=1e-12)
    assert build_footprint(mover(), build_strip(strip()), 0.2) == Footprint()


@pytest.mark.parametrize(
    ("changes", "place"),
    [
        ({"moves": [{"distance_m": 0.5, "turn_deg": 90.0}]}, r"mover\.moves"),
        ({"price_nats_per_m": -1.0}, r"mover\.price_nats_per_m"),
        ({"practice": {"strips": 1}}, r"mover\.practice\.strips"),
        ({"practice": {"trying": {"validate_every": 5}}}, r"mover\.practice\.trying\.validate_every"),
    ],
)
def test_a_mover_that_cannot_be_is_refused(changes, place):
    """No turn on the spot; a price that pays for driving; nothing to try; a checkpoint amid a batch."""
    with pytest.raises(ConfigError, match=place):
        build_motions(mover(**changes))


def test_as_trained_is_what_the_simulator_takes_for_granted():
    """The file repeats the defaults of Conditions so that help can show them; they must not drift."""
    settings = typed(compose_settings("rehearse", []), VERBS["rehearse"])
    assert build_conditions(settings.condition) == Conditions()


@pytest.mark.parametrize("option", [o for o in options("condition") if o != "as-trained"])
def test_each_condition_changes_something(option):
    """A condition that equals training would prove nothing."""
    settings = typed(compose_settings("rehearse", [f"condition={option}"]), VERBS["rehearse"])
    assert build_conditions(settings.condition) != Conditions()


def test_conditions_join():
    """A list of conditions applies them all, in order."""
    settings = typed(compose_settings("rehearse", ["condition=[dim-light,crowd]"]), VERBS["rehearse"])
    assert build_conditions(settings.condition) == Conditions(light_level=0.3, people=6)


def test_a_plus_joins_conditions_under_one_name():
    """Dim light with a crowd is one condition of a study, and as-trained is another."""
    found = conditions_of("conditions=[as-trained,dim-light+crowd]")
    assert found == {
        "as-trained": Conditions(),
        "dim-light+crowd": Conditions(light_level=0.3, people=6),
    }


def test_all_conditions_are_those_that_have_a_file():
    """And no two of them are the same."""
    found = conditions_of("conditions=[all]")
    assert set(found) == set(options("condition"))
    assert len({repr(conditions) for conditions in found.values()}) == len(found)


def test_a_condition_of_ones_own_is_found_by_name(tmp_path):
    """Beside the shipped ones, and joined with them."""
    (tmp_path / "condition").mkdir()
    (tmp_path / "condition" / "fog.yaml").write_text("missing_scale: 5.0\nlight_level: 0.5\n")
    here = f"hydra.searchpath=['file://{tmp_path}']"  # what --config-dir becomes
    found = conditions_of("conditions=[fog,fog+crowd]", here)
    assert found == {
        "fog": Conditions(missing_scale=5.0, light_level=0.5),
        "fog+crowd": Conditions(missing_scale=5.0, light_level=0.5, people=6),
    }


@pytest.mark.parametrize("verb", ["train", "demo"])
@pytest.mark.parametrize("part", options("part"))
def test_every_part_changes_the_recipe_but_the_whole(verb, part):
    """Part of a sweep that changed nothing would be a repetition passed off as a finding."""
    whole, changed = (typed(compose_settings(verb, given), VERBS[verb]) for given in ([], [f"part={part}"]))
    assert (changed == whole) == (part == "whole")


def test_a_picture_is_read_as_its_settings_say(tmp_path):
    """6 x 4 pixels of half a metre, a frame of walls one pixel thick, the lower left corner at (10, -2)."""
    levels = np.zeros((4, 6), np.uint8)
    levels[1:-1, 1:-1] = 255
    Image.fromarray(levels).save(tmp_path / "hall.png")
    words = ["metres_per_pixel=0.5", "wall_grey=[0,60]", "free_grey=[200,255]", "left_m=10", "bottom_m=-2"]
    words = [f"site.file={tmp_path}/hall.png", *(f"site.{word}" for word in words)]
    plan = build_plan(typed(compose_settings("plan", words), VERBS["plan"]).site)
    assert plan.bounds == pytest.approx((10.0, -2.0, 13.0, 0.0))


@pytest.mark.parametrize("key", ["metres_per_pixel=0.5", "wall_grey=[0,60]", "left_m=10"])
def test_settings_of_a_picture_are_refused_for_another_plan(key):
    """A GeoJSON plan has a scale of its own: a setting that does nothing would mislead."""
    words = [f"site.file={data_dir('toy_worlds') / 'square_room.geojson'}", f"site.{key}"]
    with pytest.raises(PlanError) as raised:
        build_plan(typed(compose_settings("plan", words), VERBS["plan"]).site)
    assert raised.value.got == key.split("=")[0]


def test_shipped_folders_are_found_beside_the_package_in_a_checkout():
    """The wheel's case is tested in test_packaging."""
    assert data_dir("configs") == Path(__file__).resolve().parents[2] / "configs"

"""Settings: types, ranges, and that the shipped files fit the classes."""

from pathlib import Path

import pytest
from omegaconf import OmegaConf

from learnfilter.app.build import build_conditions, build_strip
from learnfilter.app.command import compose_settings
from learnfilter.app.config import GridConfig, MotionConfig, StripConfig, flat, typed
from learnfilter.app.paths import data_dir
from learnfilter.app.verbs import VERBS
from learnfilter.core.errors import ConfigError
from learnfilter.core.strip import lay_on_ring
from learnfilter.sim.conditions import Conditions

CONFIGS = data_dir("configs")
GROUPS = {"strip": StripConfig, "grid": GridConfig, "motion": MotionConfig}


def options(group: str) -> list[str]:
    return sorted(path.stem for path in (CONFIGS / group).glob("*.yaml"))


def strip(**changes: object) -> StripConfig:
    return typed(
        OmegaConf.merge(OmegaConf.load(CONFIGS / "strip" / "depth-colour-90.yaml"), changes), StripConfig
    )


@pytest.mark.parametrize(("group", "option"), [(g, o) for g in GROUPS for o in options(g)])
def test_every_shipped_option_is_valid(group, option):
    """A settings file that does not fit its class would fail only in a user's hands."""
    typed(OmegaConf.load(CONFIGS / group / f"{option}.yaml"), GROUPS[group])


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_settings_for_all_its_keys(verb):
    """Defaults live in the files alone, so each key must stand there."""
    given = {"replay": ["bundle=some", "drive=some.csv"], "label": ["drive=some.csv"]}.get(verb, [])
    composed = compose_settings(verb, ["site.file=some.geojson", *given])
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


def test_shipped_folders_are_found_beside_the_package_in_a_checkout():
    """The wheel's case is tested in test_packaging."""
    assert data_dir("configs") == Path(__file__).resolve().parents[2] / "configs"

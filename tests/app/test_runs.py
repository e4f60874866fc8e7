"""Run folders: one set of settings each."""

import json

import pytest
from omegaconf import OmegaConf

from learnfilter.app.config import Common
from learnfilter.app.runs import SUMMARY_SCHEMA, open_run
from learnfilter.core.errors import ConfigError


@pytest.fixture
def settings(tmp_path) -> Common:
    return Common(name=None, runs=str(tmp_path), seed=3, threads=None)


def test_a_run_records_its_settings_and_a_summary(settings, tmp_path):
    """What made a result lies beside it."""
    open_run("plan", "a", settings).finish({"walls": 4})
    summary = json.loads((tmp_path / "plan" / "a" / "summary.json").read_text())
    assert OmegaConf.load(tmp_path / "plan" / "a" / "config.yaml").seed == 3
    assert (summary["schema"], summary["verb"], summary["seed"]) == (SUMMARY_SCHEMA, "plan", 3)
    assert summary["results"] == {"walls": 4}


def test_the_same_settings_take_a_run_up_again(settings):
    """A killed run goes on where it was."""
    assert not open_run("train", "a", settings).resumed
    assert open_run("train", "a", settings).resumed


def test_other_settings_do_not_mix_into_a_run(settings):
    """The first setting that differs is named."""
    open_run("train", "a", settings)
    settings.seed = 4
    with pytest.raises(ConfigError) as raised:
        open_run("train", "a", settings)
    assert (raised.value.place, raised.value.expected, raised.value.got) == ("seed", 3, 4)


def test_a_run_that_may_be_replaced_is(settings, tmp_path):
    """Verbs of a few seconds start afresh; until they end, what was there stays whole."""
    open_run("plan", "a", settings).finish({})
    settings.seed = 4
    run = open_run("plan", "a", settings, replace=True)
    seeds = [OmegaConf.load(tmp_path / "plan" / "a" / "config.yaml").seed]
    run.finish({})
    seeds.append(OmegaConf.load(tmp_path / "plan" / "a" / "config.yaml").seed)
    assert seeds == [3, 4]


def test_a_moved_run_can_be_taken_up(settings, tmp_path):
    """Where a run lies is not among what made it."""
    open_run("train", "a", settings)
    (tmp_path / "train").rename(tmp_path / "moved")
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "moved").rename(tmp_path / "elsewhere" / "train")
    settings.runs = str(tmp_path / "elsewhere")
    assert open_run("train", "a", settings).resumed


def test_a_place_that_cannot_be_written_is_the_users_to_mend(settings, tmp_path):
    """A file stands where the folder should be."""
    (tmp_path / "train").write_text("")
    with pytest.raises(ConfigError):
        open_run("train", "a", settings)

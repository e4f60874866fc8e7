"""One command: parse the line, compose settings, run a verb; and the one policy for errors."""

from __future__ import annotations

import argparse
import os
import re
import sys
import tempfile
import traceback
from difflib import get_close_matches
from importlib import import_module
from typing import Any, NoReturn

import hydra
from hydra import compose, initialize_config_dir
from hydra.core.global_hydra import GlobalHydra
from hydra.core.hydra_config import HydraConfig
from hydra.core.override_parser.overrides_parser import OverridesParser
from hydra.errors import HydraException, OverrideParseException
from omegaconf import DictConfig, ListConfig, OmegaConf
from omegaconf.errors import OmegaConfBaseException

from learnfilter import __version__
from learnfilter.app.config import flat, typed
from learnfilter.app.help import general_help, verb_help
from learnfilter.app.paths import data_dir
from learnfilter.app.threads import set_threads
from learnfilter.app.verbs import VERBS
from learnfilter.core.errors import ConfigError, InputError

# In a sweep the composing library shall neither log nor leave folders of its own about.
_QUIET = (
    "hydra/job_logging=none",
    "hydra/hydra_logging=none",
    "hydra.output_subdir=null",
    "hydra.sweep.subdir=.",
)
# Settings of a sweep that do not become part of its jobs' names, beside those that are the same in all.
_NAMELESS = ("name", "runs", "threads")


BASE = "as-trained"  # the condition that all others change


def run_command(words: list[str]) -> int:
    """Run `learnfilter WORDS` under the one policy for errors; returns the exit code."""
    verb = next((word for word in words if word in VERBS), "")
    who = f"learnfilter {verb}".strip()
    try:
        return _dispatch(words)
    except InputError as error:
        return _mistake(who, str(error))
    except HydraException as error:
        return _mistake(who, _explained(error, verb))
    except OmegaConfBaseException as error:
        return _mistake(who, str(error).splitlines()[0])
    except OSError as error:
        if error.filename is None:
            return _our_fault(who, error)
        return _mistake(who, str(InputError("cannot be used", file=error.filename, got=error.strerror)))
    except KeyboardInterrupt:
        print(f"{who}: stopped", file=sys.stderr)
        return 130
    except Exception as error:
        return _our_fault(who, error)


def _dispatch(words: list[str]) -> int:
    line = _parse(words)
    if line.version:
        print(f"learnfilter {__version__}")
    elif not line.words:
        print(general_help())
        return 0 if line.help else 2
    else:
        verb, *overrides = line.words
        if verb not in VERBS:
            raise ConfigError("there is no such verb", expected=" or ".join(VERBS), got=verb)
        if line.config_dir:
            overrides.append(_search_path(line.config_dir))
        if line.help:
            print(verb_help(verb))
        elif line.multirun:
            _sweep(verb, overrides)
        else:
            run_verb(verb, compose_settings(verb, overrides))
    return 0


def run_verb(verb: str, composed: DictConfig, swept: str = "") -> dict[str, Any]:
    """Run one job of a verb; returns its summary.

    Args:
        verb: a name in VERBS.
        composed: its settings.
        swept: in a sweep, what sets this job apart from the others; it becomes part of the run's name.
    """
    settings = typed(composed, VERBS[verb])
    if swept:
        settings.name = f"{settings.name},{swept}" if settings.name else swept
    set_threads(settings.threads)
    return import_module(f"learnfilter.app.verbs.{verb}").run(settings)


class _Parser(argparse.ArgumentParser):
    def error(self, message: str) -> NoReturn:
        raise ConfigError(f"{message} (learnfilter --help lists what there is)")


def _parse(words: list[str]) -> argparse.Namespace:
    parser = _Parser(add_help=False, allow_abbrev=False)
    parser.add_argument("words", nargs="*")
    parser.add_argument("-h", "--help", action="store_true")
    parser.add_argument("-m", "--multirun", action="store_true")
    parser.add_argument("--config-dir")
    parser.add_argument("--version", action="store_true")
    return parser.parse_intermixed_args(words)


def _search_path(folder: str) -> str:
    if not os.path.isdir(folder):
        raise ConfigError("there is no such folder", place="--config-dir", got=folder)
    return f"hydra.searchpath=['file://{os.path.abspath(folder)}']"


def compose_settings(verb: str, overrides: list[str]) -> DictConfig:
    """The settings of `learnfilter VERB OVERRIDES`, not yet checked; within a job of a sweep too."""
    running = GlobalHydra.instance().hydra
    GlobalHydra.instance().clear()
    try:
        with initialize_config_dir(version_base="1.3", config_dir=str(data_dir("configs"))):
            return with_conditions(compose(verb, overrides), [o for o in overrides if o.startswith("hydra.")])
    finally:
        GlobalHydra.instance().hydra = running


def with_conditions(composed: DictConfig, overrides: list[str]) -> DictConfig:
    """Put what the files of configs/condition say in the place of the names under `conditions`.

    Args:
        composed: settings of a verb; those without `conditions` are left alone.
        overrides: where else files may lie.
    """
    names = composed.get("conditions")
    if not isinstance(names, ListConfig):
        return composed
    loader = GlobalHydra.instance().config_loader()
    known = loader.get_group_options("condition", config_name="conditions", overrides=overrides)
    parts = {str(name): str(name).split("+") for name in (known if list(names) == ["all"] else names)}
    for part in (part for own in parts.values() for part in own):
        if part not in known:
            expected = " or ".join(["all", *known])
            raise ConfigError("no such condition", place="conditions", expected=expected, got=part)
    composed.conditions = {
        name: compose(
            "conditions", [*overrides, f"condition=[{','.join(part for part in own if part != BASE)}]"]
        ).condition
        for name, own in parts.items()
    }
    return composed


def _sweep(verb: str, overrides: list[str]) -> None:
    """Run every job of a sweep, by whichever launcher `hydra/launcher` names."""
    os.environ["HYDRA_FULL_ERROR"] = "1"  # errors reach run_command instead of being printed there
    parsed = OverridesParser.create().parse_overrides(overrides)
    alike = [override.key_or_group for override in parsed if not override.is_sweep_override()]
    named_apart = f"hydra.job.config.override_dirname.exclude_keys=[{','.join((*_NAMELESS, *alike))}]"
    sys.argv[1:] = ["--multirun", *_QUIET, named_apart, f"hydra.sweep.dir=${{runs}}/{verb}", *overrides]
    hydra.main(version_base="1.3", config_path=str(data_dir("configs")), config_name=verb)(_sweep_job)()


def _sweep_job(composed: DictConfig) -> dict[str, Any]:
    job = HydraConfig.get().job
    print(
        f"learnfilter {job.config_name}: job {job.num}: {job.override_dirname}", file=sys.stderr, flush=True
    )
    here = [f"hydra.searchpath={list(HydraConfig.get().searchpath)}"]
    composed = with_conditions(composed, here)
    return run_verb(job.config_name, composed, re.sub(r"[^\w.,=+-]+", "-", job.override_dirname))


def _explained(error: HydraException, verb: str) -> str:
    """Say in one line, in the user's words, what the composing library found."""
    text = str(error)
    wrong_key = re.match(r"Could not override '([^']+)'", text)
    if wrong_key:
        known = flat(OmegaConf.to_container(compose_settings(verb, [])))
        near = " or ".join(get_close_matches(wrong_key[1], known))
        return str(ConfigError("there is no such setting", place=wrong_key[1], expected=near or None))
    if isinstance(error, OverrideParseException):
        expected = """key=value, with quotes where the value has spaces or brackets: "key='a (b)'\""""
        return str(ConfigError("cannot be read", place=error.override, expected=expected))
    wrong_choice = re.search(
        r"Could not find '(\w+)/([^']+)'\n+Available options in '[^']*':\n((?:\t.+\n?)+)", text
    )
    if wrong_choice:
        group, got, choices = wrong_choice.groups()
        return str(ConfigError("no such choice", place=group, expected=" or ".join(choices.split()), got=got))
    return " ".join(re.split(r"\n(?:Config search path|See https?:)", text)[0].split())


def _mistake(who: str, message: str) -> int:
    print(f"{who}: {message}", file=sys.stderr)
    return 2


def _our_fault(who: str, error: Exception) -> int:
    handle, path = tempfile.mkstemp(prefix="learnfilter-", suffix=".txt")
    with os.fdopen(handle, "w", encoding="utf-8") as file:
        file.writelines(traceback.format_exception(error))
    print(f"{who}: {type(error).__name__}: {error} (our fault; the details are in {path})", file=sys.stderr)
    return 1

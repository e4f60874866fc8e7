"""Run folders: runs/<verb>/<name>/ with the settings that made it and a summary of what came out."""

from __future__ import annotations

import platform
import time
from dataclasses import asdict, dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from omegaconf import OmegaConf

from learnfilter import __version__
from learnfilter.app.config import Common, flat
from learnfilter.core.errors import ConfigError
from learnfilter.core.files import whole_file, write_json

SUMMARY_SCHEMA = 1
# Where a run lies does not change what it computes.
_PLACE = ("runs", "name")


@dataclass(frozen=True)
class RunFolder:
    """A place for one run's files.

    Attributes:
        path: the folder.
        verb: which verb made it.
        settings: resolved, plain.
        started: clock when this process opened it, seconds.
        resumed: whether an earlier process had opened it with the same settings.
    """

    path: Path
    verb: str
    settings: dict[str, Any]
    started: float
    resumed: bool

    def finish(self, results: dict[str, Any]) -> dict[str, Any]:
        """Write summary.json and return it; call last, since it marks the run as complete."""
        _record(self.path, self.settings)
        summary = {
            "schema": SUMMARY_SCHEMA,
            "verb": self.verb,
            "name": self.path.name,
            "seed": self.settings["seed"],
            "versions": _versions(),
            "seconds": round(time.time() - self.started, 3),
            "results": results,
        }
        write_json(self.path / "summary.json", summary)
        return summary


def open_run(verb: str, name: str, settings: Common, *, replace: bool = False) -> RunFolder:
    """Make a run folder, or take up the one that the same settings made.

    Args:
        verb, name: give the folder, `<runs>/<verb>/<name>`.
        settings: of the verb.
        replace: for verbs that finish in seconds and take nothing up: other settings replace the run,
            and are recorded once it is finished, so that a mistake leaves an earlier run whole.

    Raises:
        ConfigError: the folder holds a run with other settings, or cannot be written.
    """
    path = Path(settings.runs) / verb / name
    record = path / "config.yaml"
    mine = asdict(settings)
    earlier = OmegaConf.to_container(OmegaConf.load(record)) if record.is_file() else None
    if earlier is not None and not replace:
        _refuse_mixture(path, earlier, mine)
    try:
        path.mkdir(parents=True, exist_ok=True)
        if not replace:
            _record(path, mine)
    except OSError as error:
        raise ConfigError("cannot write here", file=path, place="runs", got=error.strerror) from error
    return RunFolder(path, verb, mine, time.time(), resumed=earlier is not None)


def _record(path: Path, settings: dict[str, Any]) -> None:
    with whole_file(path / "config.yaml") as beside:
        beside.write_text(OmegaConf.to_yaml(OmegaConf.create(settings)), encoding="utf-8")


def _refuse_mixture(path: Path, earlier: Any, mine: dict[str, Any]) -> None:
    old, new = flat(earlier), flat(mine)
    for key in sorted(old.keys() | new.keys()):
        if key not in _PLACE and old.get(key) != new.get(key):
            raise ConfigError(
                "this folder holds a run with other settings (choose another name=...)",
                file=path,
                place=key,
                expected=old.get(key, "none"),
                got=new.get(key, "none"),
            )


def _versions() -> dict[str, str]:
    """Versions of what a result may depend on."""
    found = {"learnfilter": __version__, "python": platform.python_version()}
    for package in ("numpy", "numba", "scipy", "shapely", "torch"):
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            continue
    return found

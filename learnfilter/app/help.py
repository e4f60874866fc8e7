"""What `--help` says.  Texts are the docstrings of the verbs, settings are the files in configs/."""

from __future__ import annotations

import ast
import textwrap
from importlib.util import find_spec
from pathlib import Path

from omegaconf import OmegaConf

from learnfilter.app.paths import data_dir
from learnfilter.app.verbs import VERBS
from learnfilter.core.notice import SAFETY_NOTICE

_USAGE = """\
Find out where a robot with one strip sensor is on a floor plan it knows.

  learnfilter VERB [key=value ...]          one run
  learnfilter VERB -m key=a,b [key=value]   one run for each value (hydra/launcher=joblib: side by side)
  learnfilter VERB --help                   what the verb does, its settings and their defaults
  learnfilter VERB --config-dir DIR ...     settings files of your own: DIR/strip/mine.yaml is strip=mine
  learnfilter --version
"""
_EXITS = "Exit code: 0 fine, 2 something to mend in the input (one line says what), 1 our fault, 130 stopped."


def general_help() -> str:
    """The help of the command: usage, a line and an example for each verb, the safety notice."""
    verbs = []
    for verb in VERBS:
        summary, _, rest = verb_text(verb).partition("\n")
        example = next(line.strip() for line in rest.splitlines() if line.strip().startswith("learnfilter "))
        verbs.append(f"  {verb:<10}{summary}\n{'':<12}{example}")
    return "\n".join([_USAGE, "Verbs:", *verbs, "", _EXITS, "", textwrap.fill(SAFETY_NOTICE, 100)])


def verb_help(verb: str) -> str:
    """The help of one verb: its text, then every setting with its default and comment."""
    return f"{verb_text(verb)}\n\nSettings and their defaults:\n\n{_settings(verb)}\n{_EXITS}"


def verb_text(verb: str) -> str:
    """The docstring of a verb's module, read without importing what it stands on."""
    module = find_spec(f"learnfilter.app.verbs.{verb}")
    assert module is not None and module.origin is not None
    text = ast.get_docstring(ast.parse(Path(module.origin).read_text(encoding="utf-8")))
    assert text is not None
    return text


def _settings(verb: str) -> str:
    """The verb's settings file, and under each group's name the file it takes by default."""
    folder = data_dir("configs")
    primary = folder / f"{verb}.yaml"
    parts = []
    for entry in OmegaConf.to_container(OmegaConf.load(primary))["defaults"]:  # type: ignore[index,call-overload]
        if entry == "_self_":
            parts.append(primary.read_text(encoding="utf-8").partition("- _self_\n")[2].strip())
            continue
        group, option = next(iter(entry.items())) if isinstance(entry, dict) else (None, entry)
        parts.append(_group(folder, group, option))
    return "\n".join(part + "\n" for part in parts if part)


def _group(folder: Path, group: str | None, option: str | list[str]) -> str:
    if group is None:
        assert isinstance(option, str)
        text = (folder / f"{option}.yaml").read_text(encoding="utf-8").strip()
        return text if "/" not in option else f"{Path(option).parent}:\n{textwrap.indent(text, '  ')}"
    others = ", ".join(sorted(path.stem for path in (folder / group).glob("*.yaml")))
    if isinstance(option, list):
        return f"# {group}=NAME or {group}=[NAME,NAME]: {others}"
    text = (folder / group / f"{option}.yaml").read_text(encoding="utf-8").strip()
    return f"{group}:  # {group}={option}; there are {others}\n{textwrap.indent(text, '  ')}"

"""What the documents say is true: commands compose, Python runs, files exist, verbs are all there."""

import re
import shlex
from pathlib import Path

import numpy as np
import pytest

from learnfilter.app.command import compose_settings
from learnfilter.app.config import typed
from learnfilter.app.help import general_help, verb_text
from learnfilter.app.verbs import VERBS
from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.runtime.bundle import MANIFEST
from tests.shipping import STRIP, shipped

__all__ = ["shipped"]

TOP = Path(__file__).resolve().parents[1]
README, DEVELOPERS = (TOP / "README.md").read_text(), (TOP / "DEVELOPERS.md").read_text()


def blocks(text: str, language: str) -> list[str]:
    """Fenced blocks of a language."""
    return re.findall(rf"```{language}\n(.*?)```", text, re.DOTALL)


def commands(text: str) -> list[str]:
    """Lines that start with `learnfilter`, indented or not, without their comments."""
    found = re.findall(r"^ *(learnfilter (?!VERB).+)$", text, re.MULTILINE)
    return [line.split("  #")[0].strip() for line in found]


def first_job(line: str) -> tuple[str, list[str]]:
    """Verb and settings of a command; of a sweep those of its first job, without the launcher's."""
    _, verb, *words = shlex.split(line)
    if "-m" not in words:
        return verb, words
    own = [word for word in words if word != "-m" and not word.startswith("hydra")]
    return verb, [word if "[" in word else word.split(",")[0] for word in own]


IN_README = [line for block in blocks(README, "sh") for line in commands(block)]
IN_HELP = [line for verb in VERBS for line in commands(verb_text(verb))]


@pytest.mark.parametrize("line", [*IN_README, *IN_HELP])
def test_a_command_in_the_documents_composes(line):
    """Its verb and every setting exist, and every value is in range."""
    verb, overrides = first_job(line)
    typed(compose_settings(verb, overrides), VERBS[verb])


@pytest.mark.parametrize("line", [line for line in README.splitlines() if line.startswith("scripts/")])
def test_a_script_in_the_readme_is_there_to_run(line):
    """An executable file."""
    script = TOP / line.split()[0]
    assert script.is_file() and script.stat().st_mode & 0o111


def test_commands_in_the_readme_use_what_earlier_ones_made():
    """Read from the top, each run folder that is named has been made, and each toy world exists."""
    made = set()
    for line in IN_README:
        verb, overrides = first_job(line)
        settings = dict(word.split("=", 1) for word in overrides)
        used = [value for value in settings.values() if value.startswith("runs/")]
        assert {tuple(value.split("/")[1:3]) for value in used} <= made, line
        if plan := settings.get("site.file"):
            assert (TOP / plan).is_file(), line
        made.add((verb, settings.get("name")))


def test_every_verb_has_a_command_in_its_help():
    """One example each, in the user's words."""
    assert {shlex.split(line)[1] for line in IN_HELP} == VERBS.keys()


def test_the_table_of_verbs_in_the_readme_is_the_table_of_verbs():
    """None missing, none made up, in the same order."""
    assert re.findall(r"^\| `(\w+)` \|", README, re.MULTILINE) == list(VERBS)


@pytest.mark.parametrize("block", blocks(README, "python"))
def test_python_in_the_readme_runs(block, shipped, tmp_path, monkeypatch):
    """As written, on a bundle named as it says; the estimate has the members that the comment promises."""
    (tmp_path / "bundle").symlink_to(shipped("matcher"))
    monkeypatch.chdir(tmp_path)
    names = {
        "odometry": np.zeros(3),
        "depth_m": np.full(STRIP.columns, 2.0),
        "rgb": np.full((STRIP.columns, 3), 0.5),
    }
    exec(block, names)
    promised = re.findall(r"\w+", block.rpartition("# ")[2])
    assert promised and all(hasattr(names["estimate"], name) for name in promised)


def paths_in(text: str) -> set[str]:
    """What looks like a path in a checkout: in a link, or in back quotes with a slash.

    Left out: what a run or `scripts/setup` makes, what lies outside the checkout, names with a part to
    fill in.
    """
    links = re.findall(r"\]\(([^)#:]+)\)", text)
    quoted = [words.split()[0].rstrip(":") for words in re.findall(r"`([^`\n]*/[^`\n]*)`", text)]
    paths = [word for word in quoted if re.fullmatch(r"[\w.][\w./-]*", word)]
    return {
        path
        for path in [*links, *paths]
        if not path.startswith(("runs/", "events/", "../", "DIR/", ".venv/"))
    }


@pytest.mark.parametrize("path", sorted(paths_in(README) | paths_in(DEVELOPERS)))
def test_a_path_in_the_documents_exists(path):
    """From the top of the checkout, or from inside the package."""
    assert (TOP / path).exists() or (TOP / "learnfilter" / path).exists()


@pytest.mark.parametrize(
    ("path", "name"), re.findall(r"`((?:\w+/)+\w+\.py): ([A-Za-z_]+)", DEVELOPERS), ids=lambda part: part
)
def test_a_name_in_the_developers_page_is_defined_where_it_says(path, name):
    """`observe/describe.py: KINDS` and its like."""
    assert re.search(rf"^(?:class |def )?{name}\b", (TOP / "learnfilter" / path).read_text(), re.MULTILINE)


def test_the_house_in_the_developers_page_is_the_one_that_stands():
    """Every room of the package is listed, and every folder listed is there."""
    (house,) = blocks(DEVELOPERS, "text")
    rooms = set(re.findall(r"^  (\w+)/ ", house, re.MULTILINE))
    standing = {path.parent.name for path in (TOP / "learnfilter").glob("*/__init__.py")}
    assert rooms == standing
    outside = re.findall(r"^(\w+)/", house, re.MULTILINE)
    assert outside and all((TOP / folder).is_dir() for folder in outside)


def plain(text: str) -> str:
    """Text without emphasis and line breaks."""
    return " ".join(text.replace("*", "").split())


@pytest.mark.parametrize("sentence", re.findall(r"[^.]+", SAFETY_NOTICE), ids=lambda text: text.strip()[:24])
@pytest.mark.parametrize("where", ["README", "help", "manifest"])
def test_the_safety_notice_is_said_where_it_can_hurt_someone(sentence, where, shipped):
    """In the README, the command's help and every bundle's manifest, in the same words."""
    if where == "manifest":
        text = (shipped("beam") / MANIFEST).read_text()
    else:
        text = README if where == "README" else general_help()
    assert sentence.strip() in plain(text)

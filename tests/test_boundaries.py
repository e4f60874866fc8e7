"""The rooms of the house and the arrows between them, read from every import in the package."""

import ast
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "learnfilter"
TOP = PACKAGE.parent

# A room may import those it names and whatever those may import (design, "The house").
ARROWS: dict[str, set[str]] = {
    "core": set(),
    "plan": {"core"},
    "drives": {"core"},
    "runtime": {"core"},
    "render": {"plan"},
    "observe": {"render"},
    "filtering": {"observe", "drives"},
    "movers": {"filtering", "runtime"},
    "training": {"movers", "filtering"},
    "ablation": {"movers", "filtering"},
    "survey": {"render", "runtime"},
    "export": {"filtering", "runtime"},
    "sim": {"render", "drives"},
    "report": {"render"},
}
WITHOUT_TORCH = ("core", "plan", "render", "drives", "sim", "survey", "runtime")
# Only app hands the simulator to whoever needs one.
ONLY_APP = {"hydra", "hydra_plugins", "omegaconf", "rich"}
ON_THE_ROBOT = {"numpy", "safetensors"}


def imports(file: Path) -> Iterator[str]:
    """Dotted name of everything a file imports, inside functions too."""
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file}: relative imports hide the room"
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def files(room: str) -> list[Path]:
    return sorted((PACKAGE / room).rglob("*.py"))


def outside(room: str) -> set[str]:
    """Top names of what a room imports that is neither the standard library nor ours."""
    tops = {name.split(".")[0] for file in files(room) for name in imports(file)}
    return tops - set(sys.stdlib_module_names) - {"learnfilter"}


def below(room: str) -> set[str]:
    """Every room an arrow leads to, step by step."""
    return ARROWS[room].union(*map(below, ARROWS[room]))


def test_every_room_has_its_arrows():
    """A new folder in the package is given a place in the house first."""
    rooms = {path.name for path in PACKAGE.iterdir() if path.is_dir() and any(path.rglob("*.py"))}
    assert rooms - {"app"} <= ARROWS.keys()


@pytest.mark.parametrize("room", ARROWS)
def test_arrows_point_down_only(room):
    """A room imports itself and rooms below it, nothing beside or above."""
    allowed = below(room) | {room}
    wrong = [
        f"{file.relative_to(TOP)} imports {name}"
        for file in files(room)
        for name in imports(file)
        if name.startswith("learnfilter.") and name.split(".")[1] not in allowed | {"__version__"}
    ]
    assert wrong == []


@pytest.mark.parametrize("room", WITHOUT_TORCH)
def test_torch_stays_out_of(room):
    """These rooms work where torch is not installed."""
    assert "torch" not in outside(room)


@pytest.mark.parametrize("room", ARROWS)
def test_only_app_knows_the_command_line(room):
    """Settings files and progress bars stop at the edge."""
    assert outside(room) & ONLY_APP == set()


@pytest.mark.parametrize("room", ["core", "runtime"])
def test_what_the_robot_runs_needs_little(room):
    """NumPy and safetensors are all that a robot has to install."""
    assert outside(room) <= ON_THE_ROBOT


def test_the_package_itself_imports_nothing():
    """`import learnfilter` does no work, so the runtime stays light."""
    assert list(imports(PACKAGE / "__init__.py")) == []


BLOCKED = "import sys; sys.modules.update(torch=None, scipy=None, numba=None, shapely=None); import {}"


@pytest.mark.parametrize("room", ["core", "drives.drive", "runtime"])
def test_imports_without_what_trains(room):
    """A fresh interpreter, because this one has imported everything already."""
    subprocess.run([sys.executable, "-c", BLOCKED.format(f"learnfilter.{room}")], check=True, cwd=TOP)


@pytest.mark.parametrize("room", [*ARROWS, "app"])
def test_modules_stay_readable(room):
    """Design: a module stays under about 300 lines."""
    long = {
        str(file.relative_to(TOP)): lines
        for file in files(room)
        if (lines := len(file.read_text(encoding="utf-8").splitlines())) > 300
    }
    assert long == {}


def test_no_file_names_a_path_of_some_machine():
    """Whoever clones this has other folders."""
    path = re.compile(r"(?<![\w.])/(?:work|root|tmp|opt|home/\w+|Users/\w+)/")
    kinds = {".py", ".yaml", ".toml", ".md", ".txt", ".geojson", ".css", ".js", ""}
    parts = [TOP / name for name in ("learnfilter", "tests", "configs", "scripts", "toy_worlds")]
    candidates = [
        file for part in parts for file in part.rglob("*") if file.suffix in kinds and file.is_file()
    ]
    candidates += [TOP / "pyproject.toml", *TOP.glob("*.md")]
    wrong = [
        str(file.relative_to(TOP)) for file in candidates if path.search(file.read_text(encoding="utf-8"))
    ]
    assert wrong == []

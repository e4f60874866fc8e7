"""The wheel: what it carries, what it needs, and that it works away from the checkout."""

import os
import shutil
import subprocess
import sys
import tomllib
import venv
import zipfile
from pathlib import Path

import pytest

TOP = Path(__file__).resolve().parents[1]
PIP = [sys.executable, "-m", "pip", "--disable-pip-version-check", "--quiet"]
CONSTRAINTS = TOP / "scripts" / "constraints.txt"


def run(*command: str | Path, cwd: Path, **environment: str) -> str:
    """Standard output of a command that must succeed."""
    environment = {"PATH": os.environ["PATH"], "HOME": str(cwd), **environment}
    done = subprocess.run(command, cwd=cwd, env=environment, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return done.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory) -> Path:
    """A wheel built from a copy of what a clone holds."""
    source, out = tmp_path_factory.mktemp("source"), tmp_path_factory.mktemp("wheel")
    for name in ("learnfilter", "configs", "toy_worlds"):
        shutil.copytree(TOP / name, source / name, ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copy(TOP / "pyproject.toml", source)
    run(sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", out, source, cwd=out)
    return next(out.glob("*.whl"))


@pytest.mark.slow
@pytest.mark.parametrize("folder", ["configs", "toy_worlds"])
def test_wheel_carries_the_shipped_folders_whole(wheel, folder):
    """Settings and toy worlds come with the package, file by file."""
    prefix = f"learnfilter/_data/{folder}/"
    expected = {
        path.relative_to(TOP / folder).as_posix() for path in (TOP / folder).rglob("*") if path.is_file()
    }
    with zipfile.ZipFile(wheel) as archive:
        carried = {name.removeprefix(prefix) for name in archive.namelist() if name.startswith(prefix)}
    assert carried == expected


@pytest.fixture(scope="module")
def robot(wheel, tmp_path_factory) -> Path:
    """The interpreter of a bare environment with the wheel and what it asks for."""
    folder = tmp_path_factory.mktemp("robot")
    venv.create(folder)
    python = folder / "bin" / "python"
    subprocess.run(
        [*PIP, "--python", python, "install", "--constraint", CONSTRAINTS, wheel], check=True, cwd=folder
    )
    return python


@pytest.mark.slow
def test_a_robot_installs_numpy_and_safetensors_alone(robot, tmp_path):
    """The base package asks for nothing else."""
    names = "from importlib.metadata import distributions as d; print(*(x.name.lower() for x in d()))"
    assert set(run(robot, "-c", names, cwd=tmp_path).split()) == {"learnfilter", "numpy", "safetensors"}


@pytest.mark.slow
def test_the_runtime_imports_on_a_robot(robot, tmp_path):
    """Without torch, from the wheel, in a folder that is not the checkout."""
    run(robot, "-c", "import learnfilter.runtime", cwd=tmp_path)


@pytest.mark.slow
def test_the_command_says_what_is_missing_on_a_robot(robot, tmp_path):
    """One line and exit code 2 where the extra `train` is not installed."""
    done = subprocess.run(
        [robot.parent / "learnfilter", "plan"], cwd=tmp_path, capture_output=True, text=True
    )
    assert (done.returncode, done.stderr.count("\n")) == (2, 1)
    assert "pip install 'learnfilter[train]'" in done.stderr


@pytest.mark.slow
def test_the_command_works_from_any_folder_when_installed_from_the_wheel(wheel, tmp_path):
    """The settings are found inside the package."""
    package = tmp_path / "site"
    subprocess.run([*PIP, "install", "--no-deps", "--no-index", "--target", package, wheel], check=True)
    square = package / "learnfilter" / "_data" / "toy_worlds" / "square_room.geojson"
    command = (sys.executable, "-m", "learnfilter.app.main", "plan", f"site.file={square}")
    said = run(*command, cwd=tmp_path, PYTHONPATH=str(package))
    assert "4.0 x 4.0 m" in said


def test_every_pin_is_exact_and_every_dependency_pinned():
    """`scripts/setup` installs the same versions everywhere."""
    lines = [line for line in CONSTRAINTS.read_text().splitlines() if not line.startswith("#")]
    pinned = {
        name.lower().replace("_", "-")
        for name, _, version in (line.partition("==") for line in lines)
        if version
    }
    assert len(pinned) == len(lines)
    project = tomllib.loads((TOP / "pyproject.toml").read_text())["project"]
    lists = [project["dependencies"], *project["optional-dependencies"].values()]
    names = {line.partition(">=")[0].lower() for asked in lists for line in asked}
    assert names <= pinned

"""Fixtures shared by the tests of verbs that need trained models."""

from pathlib import Path

import pytest

from learnfilter.app.command import run_command
from tests.app.tiny import OFFICE, STUDY, TRAINING, once, python


@pytest.fixture(scope="session")
def demo(tmp_path_factory) -> Path:
    """Run folder of a finished demo; not to be changed."""

    def make(folder: Path) -> None:
        done = python("-m", "learnfilter.app.main", "demo", "name=tiny", *TRAINING, *STUDY, cwd=folder)
        assert done.returncode == 0, done.stderr
        (folder / "said.txt").write_text(done.stdout)

    return once(tmp_path_factory, "demo", make) / "runs" / "demo" / "tiny"


@pytest.fixture(scope="session")
def office(demo, tmp_path_factory) -> Path:
    """Runs on the office: a rehearsed drive, one of another sensor, a bundle; not to be changed."""

    def make(folder: Path) -> None:
        here = (f"runs={folder}", f"site.file={OFFICE}")
        for words in (
            ("rehearse", "name=drives", "drives=1", "rows=30", *here),
            ("rehearse", "name=wide", "drives=1", "rows=4", "strip=scanner-180", *here),
            ("export", "name=office", f"model={demo}", *here),
        ):
            assert run_command(list(words)) == 0

    return once(tmp_path_factory, "office", make)

"""A bundle of every kind, written once."""

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from learnfilter.export import write_bundle
from tests.shipping import PROVENANCE, filter_of, rehearsed


@pytest.fixture(scope="session")
def shipped(tmp_path_factory) -> Callable[[str], Path]:
    """Folder of the bundle of a kind; not to be changed."""
    top, drive = tmp_path_factory.mktemp("shipped"), rehearsed()[1]

    def folder(kind: str) -> Path:
        if not (top / kind).exists():
            write_bundle(top / kind, filter_of(kind), drive, PROVENANCE)
        return top / kind

    return folder


@pytest.fixture
def bundle(shipped, tmp_path) -> Path:
    """A copy of a bundle, to be damaged."""
    return Path(shutil.copytree(shipped("matcher"), tmp_path / "bundle"))

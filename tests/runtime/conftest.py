"""A bundle of every kind, written once, and a copy to damage."""

import shutil
from pathlib import Path

import pytest

from tests.shipping import shipped

__all__ = ["bundle", "shipped"]


@pytest.fixture
def bundle(shipped, tmp_path) -> Path:
    """A copy of a bundle, to be damaged."""
    return Path(shutil.copytree(shipped("matcher"), tmp_path / "bundle"))

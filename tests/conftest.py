"""Fixtures shared by all tests."""

from pathlib import Path

import pytest

SHARED_DATA = Path(__file__).resolve().parents[2] / "shared" / "data"


@pytest.fixture(scope="session")
def shared_data() -> Path:
    """Real plans and logs that are not ours to commit; tests that need them skip without them."""
    if not SHARED_DATA.is_dir():
        pytest.skip("the open data folder ../shared/data is not here")
    return SHARED_DATA

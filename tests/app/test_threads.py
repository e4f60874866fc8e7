"""Thread settings reach the libraries."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from learnfilter.app.threads import set_threads

TOP = Path(__file__).resolve().parents[2]
ASK = """
from learnfilter.app.threads import set_threads, wait_passively
wait_passively()
{first}
import os, numba, torch
{second}
print(os.environ["OMP_WAIT_POLICY"], numba.config.THREADING_LAYER)
print(numba.get_num_threads(), torch.get_num_threads())
"""


@pytest.mark.slow
@pytest.mark.parametrize(
    ("first", "second"),
    [("set_threads(1)", ""), ("", "set_threads(1)")],
    ids=["before import", "after import"],
)
def test_both_libraries_use_the_asked_count_and_wait_passively(first, second):
    """Whether they were imported before or after; numba and torch are asked themselves."""
    environment = {key: value for key, value in os.environ.items() if not key.endswith("_NUM_THREADS")}
    said = subprocess.run(
        [sys.executable, "-c", ASK.format(first=first, second=second)],
        cwd=TOP,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    assert said.stdout.split() == ["PASSIVE", "workqueue", "1", "1"]


def test_no_count_leaves_the_environment_alone(monkeypatch):
    """None means what the machine says."""
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    set_threads(None)
    assert os.environ["OMP_NUM_THREADS"] == "7"

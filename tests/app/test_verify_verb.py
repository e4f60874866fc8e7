"""The verb verify, through the command line: a port that is right, one that is not, and none."""

import json
import re
from pathlib import Path

import numpy as np
import pytest

from learnfilter.app.command import run_command
from learnfilter.export.verify import FIELDS
from learnfilter.runtime.bundle import VECTORS
from tests.shipping import shipped

__all__ = ["shipped"]


@pytest.fixture(autouse=True)
def elsewhere(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)


@pytest.fixture
def bundle(shipped) -> str:
    return f"bundle={shipped('beam+colour')}"


@pytest.fixture
def right(shipped) -> dict[str, np.ndarray]:
    """What a port that is right gives: the expected fields of the vectors."""
    with np.load(shipped("beam+colour") / VECTORS) as file:
        return {name: file[name] for name in FIELDS}


def test_without_outputs_our_own_runtime_is_checked_and_written(bundle, capsys):
    """The file it leaves is a port's file: given back, it passes too."""
    assert run_command(["verify", bundle, "name=own"]) == 0
    assert "runs/verify/own/outputs.npz" in capsys.readouterr().out
    assert run_command(["verify", bundle, "outputs=runs/verify/own/outputs.npz"]) == 0
    said = capsys.readouterr().out
    assert all(re.search(rf"^{name} +at most \d\.\de", said, re.MULTILINE) for name in FIELDS)


def test_a_port_that_differs_ends_with_2_and_the_first_difference(bundle, right, capsys):
    """Row, field, both numbers and how far apart, in one line; the summary has it too."""
    right["pose"][17, 0] += 0.5
    np.savez("port.npz", **right)
    assert run_command(["verify", bundle, "outputs=port.npz"]) == 2
    said = capsys.readouterr()
    assert said.err.count("\n") == 1
    assert "port.npz, row 17, pose[0]: differs by 0.5, more than 0.001; expected" in said.err
    assert "differs" in said.out
    first = json.loads(Path("runs/verify/port/summary.json").read_text())["results"]["first"]
    assert (first["row"], first["place"], first["apart"]) == (17, "pose[0]", pytest.approx(0.5))


def test_a_wider_tolerance_lets_it_pass(bundle, right, capsys):
    """And what was not given is said."""
    np.savez("port.npz", pose=right["pose"] + [0.5, 0, 0])
    assert run_command(["verify", bundle, "outputs=port.npz", "within=0.6"]) == 0
    assert "not given, not compared: weighed, log_evidence" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "named"),
    [
        (["outputs=gone.npz"], "gone.npz"),
        (["outputs=port.npz"], "poses: unknown field"),
        (["within=0"], "within"),
        (["within=1"], "within"),
    ],
)
def test_what_cannot_be_compared_ends_with_2(bundle, words, named, capsys):
    """One line."""
    np.savez("port.npz", poses=np.zeros(3))
    assert run_command(["verify", bundle, *words]) == 2
    error = capsys.readouterr().err
    assert error.count("\n") == 1 and named in error and not Path("runs").exists()


def test_a_damaged_bundle_ends_with_2(tmp_path, capsys):
    """Before anything is compared."""
    (tmp_path / "empty").mkdir()
    assert run_command(["verify", "bundle=empty"]) == 2
    assert "manifest.json" in capsys.readouterr().err

"""A training killed without warning ends, when taken up again, with the weights of an undisturbed one."""

import signal
from pathlib import Path

import pytest

from tests.app.tiny import TRAINING, python

# A process that dies as it is about to write the checkpoint of iteration 4 of a stage: the best weights may
# be written already, and two iterations are lost.
DIES = """
import os, signal, sys
from learnfilter.app.threads import wait_passively
wait_passively()
from learnfilter.app.command import run_command
from learnfilter.training import loop
write = loop.save_tensors
def write_or_die(path, tensors, facts):
    if path.stem == sys.argv[1] and facts["iteration"] == 4:
        os.kill(os.getpid(), signal.SIGKILL)
    write(path, tensors, facts)
loop.save_tensors = write_or_die
sys.exit(run_command(sys.argv[2:]))
"""
STAGES = ("tuning-beam", "matching", "filtering")


@pytest.fixture(scope="module")
def taken_up(tmp_path_factory) -> Path:
    """Run folder of a training killed once in every stage."""
    here = tmp_path_factory.mktemp("killed")
    words = ("train", "name=killed", *TRAINING)
    for stage in STAGES:
        done = python("-c", DIES, stage, *words, cwd=here)
        assert done.returncode == -signal.SIGKILL, done.stderr
    done = python("-m", "learnfilter.app.main", *words, cwd=here)
    assert done.returncode == 0, done.stderr
    return here / "runs" / "train" / "killed"


@pytest.mark.slow
def test_a_training_killed_in_every_stage_ends_with_the_same_bytes(taken_up, demo):
    """The demo's training is the undisturbed one: same settings, same seed."""
    whole = {path.name: path.read_bytes() for path in (demo / "models").iterdir()}
    assert len(whole) == 6
    assert {path.name: path.read_bytes() for path in (taken_up / "models").iterdir()} == whole

"""Files are written whole or not at all."""

import json
import os
import signal
import subprocess
import sys

import pytest

from learnfilter.core.files import whole_file, write_json

WRITE_AND_HANG = """
import sys, time
from learnfilter.core.files import whole_file
with whole_file(sys.argv[1]) as beside:
    beside.write_text("half of the n")
    print("written", flush=True)
    time.sleep(60)
"""


def test_a_killed_writer_leaves_the_old_file(tmp_path):
    """A real process, killed after it wrote half."""
    path = tmp_path / "summary.json"
    path.write_text("old")
    with subprocess.Popen(
        [sys.executable, "-c", WRITE_AND_HANG, str(path)], stdout=subprocess.PIPE
    ) as writer:
        assert writer.stdout.readline() == b"written\n"
        os.kill(writer.pid, signal.SIGKILL)
    assert path.read_text() == "old"


def test_an_exception_leaves_the_old_file_and_nothing_beside(tmp_path):
    """The folder is as it was."""
    path = tmp_path / "summary.json"
    path.write_text("old")
    with pytest.raises(ZeroDivisionError), whole_file(path) as beside:
        beside.write_text("new")
        _ = 1 / 0
    assert [p.name for p in tmp_path.iterdir()] == ["summary.json"]
    assert path.read_text() == "old"


def test_a_whole_file_takes_the_place_of_the_old_one(tmp_path):
    """Folders on the way are made."""
    path = tmp_path / "runs" / "train" / "notes.txt"
    for text in ("first", "second"):
        with whole_file(path) as beside:
            beside.write_text(text)
    assert path.read_text() == "second"


def test_json_is_sorted_and_keeps_its_letters(tmp_path):
    """Equal values give equal bytes, whatever their order."""
    write_json(tmp_path / "a.json", {"b": 1, "a": "Müller"})
    assert (tmp_path / "a.json").read_text(encoding="utf-8") == '{\n  "a": "Müller",\n  "b": 1\n}\n'
    assert json.loads((tmp_path / "a.json").read_text(encoding="utf-8")) == {"a": "Müller", "b": 1}


def test_json_refuses_nan(tmp_path):
    """RFC 8259 knows no NaN; the old file stays."""
    with pytest.raises(ValueError, match="not JSON compliant"):
        write_json(tmp_path / "a.json", {"score": float("nan")})
    assert not (tmp_path / "a.json").exists()

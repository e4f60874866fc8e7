"""The verbs plan and rehearse, through the command line."""

import hashlib
import json
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from learnfilter.app.command import run_command
from learnfilter.app.paths import data_dir
from learnfilter.drives.tables import read_drive
from learnfilter.plan import read_plan

SQUARE = data_dir("toy_worlds") / "square_room.geojson"
SMALL = ("count=2", "drives=1", "rows=6", "site.families=[offices,hall]")


@pytest.fixture(autouse=True)
def elsewhere(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)


def digests(folder: Path) -> dict[str, str]:
    """SHA-256 of every plan and drive."""
    files = [*folder.glob("sites/*"), *folder.glob("drives/*")]
    return {str(f.relative_to(folder)): hashlib.sha256(f.read_bytes()).hexdigest() for f in files}


def test_plan_writes_a_plan_that_reads_back_the_same():
    """The written plan is the plan that was read."""
    assert run_command(["plan", f"site.file={SQUARE}"]) == 0
    written = read_plan("runs/plan/square_room/plan.geojson")
    assert written.content_hash() == read_plan(SQUARE).content_hash()


def test_plan_draws_a_picture():
    """Another program can open it, and it is not blank."""
    assert run_command(["plan", f"site.file={SQUARE}", "name=drawn"]) == 0
    with Image.open("runs/plan/drawn/plan.png") as picture:
        assert np.asarray(picture.convert("L")).std() > 0


def test_plan_with_an_error_finding_ends_with_2_and_says_which(tmp_path, capsys):
    """A room of half a metre has no floor for a robot: it is drawn all the same, so that one can look."""
    tiny = json.loads(SQUARE.read_text().replace("4", "0.3"))
    (tmp_path / "tiny.geojson").write_text(json.dumps(tiny))
    assert run_command(["plan", "site.file=tiny.geojson"]) == 2
    said = capsys.readouterr()
    assert "error: " in said.out and "tiny.geojson" in said.err and said.err.count("\n") == 1
    assert Path("runs/plan/tiny/plan.png").exists()


def test_plan_counts_what_is_too_much_to_list(tmp_path, capsys):
    """Twelve closed rooms, the largest of them the main floor: of the eleven cut off eight are listed."""
    rooms = [[[5 * n, 0], [5 * n + 4, 0], [5 * n + 4, 4], [5 * n, 4], [5 * n, 0]] for n in range(12)]
    rooms[0] = [[0, 0], [4, 0], [4, 5], [0, 5], [0, 0]]
    plan = json.loads(SQUARE.read_text())
    (wall,) = plan["features"]
    del plan["learnfilter"]["seed"]
    plan["features"] = [
        wall | {"geometry": {"type": "LineString", "coordinates": outline}} for outline in rooms
    ]
    (tmp_path / "rooms.geojson").write_text(json.dumps(plan))
    assert run_command(["plan", "site.file=rooms.geojson"]) == 0
    said = capsys.readouterr().out
    found = json.loads(Path("runs/plan/rooms/summary.json").read_text())["results"]["findings"]
    assert (said.count("are cut off"), said.count("3 more like the one above")) == (8, 1)
    assert [finding["what"] for finding in found].count("island") == 11


def test_plan_does_not_overwrite_what_it_reads(tmp_path):
    """The user's file is never lost."""
    mine = tmp_path / "mine.geojson"
    mine.write_bytes(SQUARE.read_bytes())
    assert run_command(["plan", f"site.file={mine}", f"out={mine}"]) == 2
    assert mine.read_bytes() == SQUARE.read_bytes()


@pytest.mark.parametrize("suffix", ["parquet", "csv"])
def test_rehearse_writes_sites_and_drives_that_read_back(suffix):
    """Two sites, a drive of six strips on each, in the format asked for."""
    assert run_command(["rehearse", *SMALL, f"format={suffix}"]) == 0
    folder = Path("runs/rehearse/default")
    drives = [read_drive(path) for path in sorted(folder.glob(f"drives/*.{suffix}"))]
    plans = [read_plan(path) for path in sorted(folder.glob("sites/*.geojson"))]
    assert [len(drive) for drive in drives] == [6, 6]
    assert [drive.site for drive in drives] == [plan.name for plan in plans]


def test_rehearse_is_the_same_again_and_other_with_another_seed():
    """Same seed, same bytes."""
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        assert run_command(["rehearse", *SMALL, f"name={name}", f"seed={seed}"]) == 0
    a, b, c = (digests(Path("runs/rehearse") / name) for name in "abc")
    assert a == b and not set(a.values()) & set(c.values())


def test_a_stopped_rehearsal_goes_on_to_the_same_end():
    """What was finished stays, what was not is made again."""
    assert run_command(["rehearse", *SMALL]) == 0
    folder = Path("runs/rehearse/default")
    whole = digests(folder)
    (folder / "sites" / "0001.geojson").unlink()
    (folder / "drives" / "0001-00.parquet").unlink()
    kept = folder / "drives" / "0000-00.parquet"
    before = kept.stat().st_mtime_ns
    assert run_command(["rehearse", *SMALL]) == 0
    assert (digests(folder), kept.stat().st_mtime_ns) == (whole, before)


def test_rehearse_drives_on_a_plan_of_ones_own(capsys):
    """The strip and the plan are the user's."""
    words = ["rehearse", f"site.file={SQUARE}", "drives=1", "rows=6", "strip=scanner-180"]
    assert run_command(words) == 0
    drive = read_drive("runs/rehearse/default/drives/0000-00.parquet")
    assert (drive.depth_m.shape, drive.rgb) == ((6, 180), None)

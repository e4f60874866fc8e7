"""The verb on small bundles: tables, several side by side, what does not fit, drives longer than memory."""

import json
import tracemalloc
import weakref
from collections.abc import Iterator
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from learnfilter.app.command import run_command
from learnfilter.app.paths import data_dir
from learnfilter.app.replaying import replay_bundle
from learnfilter.app.verbs.replay import short_names
from learnfilter.core.errors import DriveError
from learnfilter.core.seeds import stream
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import write_drive
from learnfilter.export import Filter, write_bundle
from learnfilter.filtering.motion import MotionModel
from learnfilter.plan import FloorPlan, write_plan
from learnfilter.plan.floorplan import NO_FINISH, SHUT, SOLID, WALL
from learnfilter.render import grid_for, render_site
from learnfilter.runtime import load_bundle
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.rehearse import rehearse
from learnfilter.sim.world import build_world
from tests.shipping import HEADINGS, LAYOUT, PROVENANCE, REACH_M, STRIP, WEIGHING, model_of, rendered, shipped

__all__ = ["shipped"]

BARE = Conditions(furniture_per_100_m2=0.0, people=0)


@pytest.fixture
def elsewhere(tmp_path, monkeypatch) -> Path:
    """An empty folder to work in."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def table(tmp_path) -> Path:
    """Forty strips recorded on the site of the shipped bundles."""
    write_drive(rendered()[1][0].part(0, 40), tmp_path / "monday.parquet")
    return tmp_path / "monday.parquet"


def results(name: str = "monday") -> dict:
    return json.loads((Path("runs/replay") / name / "summary.json").read_text())["results"]


def test_a_table_of_estimates_tells_surprise_and_alarm(shipped, table, elsewhere):
    """Schema 2, see DEVELOPERS.md; p-values lie in (0, 1], for the bundle's watch is calibrated."""
    assert run_command(["replay", f"bundle={shipped('beam')}", f"drive={table}"]) == 0
    found = pq.read_table("runs/replay/monday/estimates.parquet")
    assert json.loads(found.schema.metadata[b"learnfilter"])["schema"] == 2
    surprise = np.array(found.column("surprise"))
    assert len(surprise) == 40 and (surprise > 0).all() and (surprise <= 1).all()
    assert not any(found.column("alarm").to_pylist()) or "lost" in found.column("state").to_pylist()


def test_several_bundles_are_laid_side_by_side(shipped, table, elsewhere):
    """A table of estimates, a row of the comparison and a story each; estimates as if it were alone."""
    both = [shipped("beam"), shipped("endpoint+colour")]
    assert run_command(["replay", f"bundle=[{both[0]},{both[1]}]", f"drive={table}"]) == 0
    names = short_names(list(map(str, both)))
    page = Path("runs/replay/monday/report.html").read_text()
    assert [said["name"] for said in results()["bundles"]] == names
    assert all(f"What happened, {name}" in page and f'<th scope="row">{name}</th>' in page for name in names)
    for name, folder in zip(names, both, strict=True):
        assert run_command(["replay", f"bundle={folder}", f"drive={table}", f"name={name}"]) == 0
        alone = pq.read_table(f"runs/replay/{name}/estimates.parquet")
        assert pq.read_table(f"runs/replay/monday/estimates-{name}.parquet").equals(alone)


def test_a_drive_that_the_second_bundle_refuses_leaves_no_table_of_the_first(
    shipped, shelf_bundle, elsewhere, capsys
):
    """All tables or none: ten metres in one step are within the first site and beyond the second."""
    drive = rendered()[1][0].part(0, 9)
    drive.odometry[5, 0] = 10.0
    write_drive(drive, "leap.parquet")
    assert run_command(["replay", f"bundle={shipped('beam')}", "drive=leap.parquet", "name=first"]) == 0
    assert run_command(["replay", f"bundle=[{shipped('beam')},{shelf_bundle}]", "drive=leap.parquet"]) == 2
    assert "row 5, odometry" in capsys.readouterr().err
    assert [path for path in Path("runs/replay/leap").rglob("*") if path.is_file()] == []


def test_a_plan_other_than_the_bundles_is_worth_a_line(shipped, table, elsewhere, capsys):
    """It is drawn all the same; the line is on the page and in the summary too."""
    square = data_dir("toy_worlds") / "square_room.geojson"
    assert run_command(["replay", f"bundle={shipped('beam')}", f"drive={table}", f"site.file={square}"]) == 0
    (line,) = capsys.readouterr().err.splitlines()
    assert "is not the one that bundle was exported for" in line
    assert results()["cautions"] == [line.removeprefix("learnfilter replay: ")]


def test_a_drive_without_colour_and_reference_is_replayed_by_depth(shipped, elsewhere, capsys):
    """Both absences are said; nobody claims to know whether a lock was right."""
    drive = replace(rendered()[1][0].part(0, 12), rgb=None, reference=None)
    write_drive(drive, elsewhere / "bare.parquet")
    assert run_command(["replay", f"bundle={shipped('beam+colour')}", "drive=bare.parquet"]) == 0
    said = capsys.readouterr()
    assert "no colour" in said.err and "no reference poses" in said.out
    (bundle,) = results("bare")["bundles"]
    assert (bundle["located_share"], bundle["rows_with_reference"]) == (None, 0)
    assert all(episode.get("right") is None for episode in bundle["episodes"])


@pytest.mark.parametrize("bundle", ["[]", "[7]", "[a,a]", "7"])
def test_what_is_no_list_of_different_bundles_is_refused(bundle, elsewhere, capsys):
    """By the name of the setting."""
    assert run_command(["replay", f"bundle={bundle}", "drive=a.parquet"]) == 2
    assert "bundle: out of range" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("paths", "expected"),
    [
        (["runs/a/bundle"], ["bundle"]),
        (["runs/a/bundle", "runs/b/bundle"], ["a-bundle", "b-bundle"]),
        (["a/x", "b/y"], ["x", "y"]),
        (["bundle", "a/bundle", "b/a/bundle"], None),
    ],
)
def test_bundles_are_called_by_as_much_of_their_paths_as_tells_them_apart(paths, expected):
    """Their last part, or more where that is the same; never twice the same."""
    names = short_names(paths)
    assert len(set(names)) == len(paths) and (expected is None or names == expected)


def test_odometry_that_cannot_be_is_refused_with_its_row(shipped, tmp_path):
    """A leap of a kilometre in the second batch's third row, counted over the whole drive."""
    drive = rendered()[1][0]
    leap = drive.part(10, 20)
    leap.odometry[2, 0] = 1000.0
    with pytest.raises(DriveError, match="row 12, odometry"):
        replay_bundle(load_bundle(shipped("beam")), iter([drive.part(0, 10), leap]), tmp_path / "e.parquet")
    assert list(tmp_path.iterdir()) == []


BATCH_ROWS = 64


def parked(batches: int, rows: int = BATCH_ROWS) -> Iterator[Drive]:
    """A drive that stands still, made piece by piece."""
    first = rendered()[1][0].part(0, 1)
    for batch in range(batches):
        yield replace(
            first,
            time_s=np.arange(rows) + 1.0 * batch * rows,
            odometry=np.zeros((rows, 3)),
            depth_m=np.repeat(first.depth_m, rows, axis=0),
            rgb=np.repeat(first.rgb, rows, axis=0),
            reference=np.repeat(first.reference, rows, axis=0),
        )


def test_batches_are_let_go(shipped, tmp_path):
    """When a batch is asked for, all strips but those of the one before it are gone."""
    strips, most = [], 0

    def watched() -> Iterator[Drive]:
        nonlocal most
        for drive in parked(6, 8):
            most = max(most, sum(strip() is not None for strip in strips))
            strips.append(weakref.ref(drive.depth_m))
            yield drive

    replay_bundle(load_bundle(shipped("beam")), watched(), tmp_path / "e.parquet")
    assert len(strips) == 6 and most <= 1


def test_memory_does_not_grow_by_the_strips(shipped, tmp_path):
    """Twenty batches more need less than half of what their depth and colour alone would, kept."""

    def peak(batches: int) -> int:
        tracemalloc.reset_peak()
        before = tracemalloc.get_traced_memory()[0]
        replay_bundle(bundle, parked(batches), tmp_path / "e.parquet")
        return tracemalloc.get_traced_memory()[1] - before

    bundle = load_bundle(shipped("beam"))
    tracemalloc.start()
    try:
        peak(1)  # what is claimed once and for all
        few, many = peak(4), peak(24)
    finally:
        tracemalloc.stop()
    strips = 20 * BATCH_ROWS * STRIP.columns * 4 * 4  # depth and three colours, float32
    assert many - few < strips / 2


def plan_with_shelf(left_m: float) -> FloorPlan:
    """A room of 7 x 5 m with a niche and a shelf of 1.5 x 0.5 m whose left end stands at `left_m`, y = 2."""
    outline = [(0, 0), (7, 0), (7, 5), (4, 5), (4, 4), (0, 4), (0, 0)]
    corners = [(left_m, 2.0), (left_m + 1.5, 2.0), (left_m + 1.5, 2.5), (left_m, 2.5)]
    walls = [(*a, *b, WALL) for a, b in pairwise(outline)]
    shelf = [(*a, *b, SOLID) for a, b in zip(corners, corners[1:] + corners[:1], strict=True)]
    lines = np.array(walls + shelf, float)
    blank = np.full(len(lines), NO_FINISH)
    return FloorPlan(
        lines[:, :4], lines[:, 4].astype(int), np.full(len(lines), SHUT), blank, np.arange(len(lines)),
        solids=(np.array(corners),), name=f"shelf at {left_m:g}",
    )  # fmt: skip


def drive_past(left_m: float, seed: int = 3) -> Drive:
    """Two hundred strips in that room, which nothing else stands in."""
    world = build_world(plan_with_shelf(left_m), stream(seed, "world"), BARE)
    return rehearse(world, STRIP, stream(seed, "drive"), 200, f"past {left_m:g}")


@pytest.fixture(scope="module")
def shelf_bundle(tmp_path_factory) -> Path:
    """A beam for the room whose shelf stands at x = 1.5 m."""
    plan = plan_with_shelf(1.5)
    site = render_site(plan, LAYOUT, grid_for(plan, HEADINGS, 0.25), robot_radius_m=0.25, max_range_m=REACH_M)
    folder = tmp_path_factory.mktemp("shelf") / "bundle"
    chosen = Filter(model_of("beam"), MotionModel(), site, STRIP, WEIGHING)
    write_bundle(folder, chosen, (drive_past(1.5, 1), drive_past(1.5, 2)), PROVENANCE)
    return folder


def disagreement(bundle: Path, left_m: float) -> list[tuple[str, float, float]]:
    """Kind and place of each patch of a replayed drive in the room with its shelf at `left_m`."""
    write_drive(drive_past(left_m), "past.parquet")
    write_plan(plan_with_shelf(1.5), "drawn.geojson")
    words = ["replay", f"bundle={bundle}", "drive=past.parquet", "site.file=drawn.geojson"]
    assert run_command(words) == 0
    return [(patch["kind"], patch["x_m"], patch["y_m"]) for patch in results("past")["bundles"][0]["patches"]]


def test_a_shelf_that_moved_is_missed_where_it_was_and_met_where_it_is(shelf_bundle, elsewhere):
    """1.8 m to the right; a patch reaches 0.25 m beyond its centre, a strip errs by 0.2 m."""
    found = disagreement(shelf_bundle, 3.3)
    gone = [(x, y) for kind, x, y in found if kind == "gone"]
    new = [(x, y) for kind, x, y in found if kind == "new"]
    assert gone and all(1.05 <= x <= 3.45 and 1.55 <= y <= 2.95 for x, y in gone)
    assert any(2.85 <= x <= 5.25 and 1.55 <= y <= 2.95 for x, y in new)


def test_a_shelf_that_stands_as_drawn_is_not_blamed(shelf_bundle, elsewhere):
    """Not a patch is called gone in an empty room drawn as it is."""
    assert [patch for patch in disagreement(shelf_bundle, 1.5) if patch[0] == "gone"] == []

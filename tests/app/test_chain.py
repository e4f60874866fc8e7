"""The chain as its user meets it: one demo of seconds in a process of its own, then its models at work."""

import html
import json
import re
import shutil
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from omegaconf import OmegaConf
from PIL import Image
from safetensors.numpy import load_file

from learnfilter.app.command import run_command
from learnfilter.app.judging import write_rows
from learnfilter.app.paths import data_dir
from learnfilter.app.verbs import VERBS
from learnfilter.drives.tables import read_drive
from learnfilter.export.check import compare
from learnfilter.plan import read_plan
from learnfilter.training.checkpoint import load_tensors
from tests.app.tiny import OFFICE, python

pytestmark = pytest.mark.slow

SQUARE = data_dir("toy_worlds") / "square_room.geojson"
GOOD, WIDE = (
    "{office}/rehearse/drives/drives/0000-00.parquet",
    "{office}/rehearse/wide/drives/0000-00.parquet",
)
MODELS = ("beam", "beam+colour", "endpoint", "endpoint+colour", "matcher")
# DEVELOPERS.md, Formats
ESTIMATES = ["time_s", "x_m", "y_m", "heading_rad", "covariance", "mass", "entropy_nats", "log_evidence_nats",
             "surprise", "state", "weighed", "alarm", "move"]  # fmt: skip
NO_TORCH = """
import sys
sys.modules["torch"] = None
from learnfilter.runtime import Localizer, load_bundle
print(Localizer(load_bundle(sys.argv[1])).belief.sum())
"""


@pytest.fixture
def elsewhere(tmp_path, monkeypatch) -> Path:
    """An empty folder to work in."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def summary_of(folder: Path) -> dict:
    return json.loads((folder / "summary.json").read_text())


def rows_of(folder: Path) -> list[dict]:
    return [json.loads(line) for line in (folder / "rows.jsonl").read_text().splitlines()]


@pytest.mark.parametrize(
    "name",
    [
        "config.yaml",
        "summary.json",
        "report.html",
        "rows.jsonl",
        "rows.parquet",
        "site.geojson",
        "drive.parquet",
        "estimates.parquet",
        "bundle/manifest.json",
        "bundle/weights.safetensors",
        "bundle/site.safetensors",
        "bundle/vectors.npz",
        *(f"models/{name}.safetensors" for name in MODELS),
        *(f"checkpoints/{stage}.safetensors" for stage in ("tuning-beam", "matching", "filtering")),
    ],
)
def test_a_demo_leaves_every_promised_file(demo, name):
    """Named in DEVELOPERS.md, none of them empty."""
    assert (demo / name).stat().st_size > 0


def test_a_demo_logs_events(demo):
    """TensorBoard finds them by their name."""
    assert list((demo / "events").glob("events.out.tfevents.*"))


@pytest.mark.parametrize("name", ["site.png", "replay.png"])
def test_a_demo_draws_pictures(demo, name):
    """Another program can open them, and they are not blank."""
    with Image.open(demo / name) as picture:
        assert np.asarray(picture.convert("L")).std() > 0


def test_a_demo_leaves_nothing_half_written(demo):
    """Files are written beside and renamed; what lies beside must be gone."""
    assert [path for path in demo.parents[1].rglob(".*") if path.is_file()] == []


def test_a_demo_ends_with_the_verdict_and_two_paths(demo):
    """The sentence, the bundle, and a page a browser can open."""
    said = (demo.parents[2] / "said.txt").read_text()
    assert summary_of(demo)["results"]["verdict"]["sentence"] in said
    assert "runs/demo/tiny/bundle" in said and (demo / "report.html").as_uri() in said


def test_a_summary_has_the_schema_of_developers_md(demo):
    """Its members, and those of the results of an ablation."""
    summary = summary_of(demo)
    assert summary.keys() == {"schema", "verb", "name", "seed", "versions", "seconds", "results"}
    assert (summary["schema"], summary["verb"], summary["name"], summary["seed"]) == (1, "demo", "tiny", 0)
    expected = {
        "best_analytic",
        "verdict",
        "scores",
        "differences",
        "milliseconds_a_strip",
        "drives",
        "sites",
    }
    assert expected <= summary["results"].keys()


def test_figures_of_a_summary_carry_their_spread(demo):
    """Value, bounds and the number of sites they rest on; two sites with a drive each here."""
    results = summary_of(demo)["results"]
    assert (results["sites"], results["drives"]) == (2, 2)
    figures = [row[key] for row in results["scores"] for key in ("located", "nll")]
    figures += [row[key] for row in results["differences"] for key in ("located_gain", "nll_gain")]
    assert figures and all(figure.keys() == {"value", "low", "high", "n"} for figure in figures)
    assert {figure["n"] for figure in figures} == {2}


def test_a_verdict_has_its_members(demo):
    """One of three answers, a sentence and how sure it is."""
    verdict = summary_of(demo)["results"]["verdict"]
    assert verdict.keys() == {"ship", "sentence", "confidence"}
    assert verdict["ship"] in ("learned", "analytic", "cannot tell")


def test_every_contender_is_judged_on_every_drive(demo):
    """Five models, the analytic one with half the columns, and the matcher without colour; two drives."""
    pairs = [(row["contender"], row["drive"]) for row in rows_of(demo)]
    assert len(set(pairs)) == len(pairs) == 14
    searched = {name for name, _ in pairs if name.endswith(" column_step=2")}
    assert len(searched) == 1
    assert {name for name, _ in pairs} == {*MODELS, *searched, "matcher, colour hidden"}


def test_the_opponent_was_chosen_by_validation(demo):
    """The analytic model with the fewest nats on held-out drives, whatever the test says."""
    results = summary_of(demo)["results"]
    nats = {name: value for name, value in results["validation_nats"].items() if name != "matcher"}
    assert results["best_analytic"] == min(nats, key=nats.__getitem__)


def test_parquet_rows_are_the_json_rows(demo):
    """Two files, one table; what a row lacks is empty."""
    table = pq.read_table(demo / "rows.parquet").to_pylist()
    expected = [{k: v for k, v in row.items() if v is not None} for row in rows_of(demo)]
    assert [{k: v for k, v in row.items() if v is not None} for row in table] == expected


def test_a_table_of_rows_has_the_columns_of_its_longest_drive(tmp_path):
    """Though a short one comes first."""
    write_rows([{"drive": "short"}, {"drive": "long", "nll_8": 2.5}], tmp_path / "rows.parquet")
    assert pq.read_table(tmp_path / "rows.parquet").column("nll_8").to_pylist() == [None, 2.5]


def test_the_bundle_loads_where_torch_is_not(demo):
    """A fresh interpreter that cannot import it; the first belief is whole (float32 sum)."""
    done = python("-c", NO_TORCH, str(demo / "bundle"), cwd=demo)
    assert done.returncode == 0, done.stderr
    assert float(done.stdout) == pytest.approx(1.0, abs=1e-4)


def test_the_runtime_reproduces_the_bundles_vectors(demo):
    """Total variation over 50 strips; float32 sums in another order differ by some 1e-6 a strip."""
    assert compare(demo / "bundle") <= 1e-4


def test_the_bundle_is_of_the_first_site(demo):
    """The plan beside it is the one it was rendered from."""
    manifest = json.loads((demo / "bundle" / "manifest.json").read_text())
    assert manifest["provenance"]["plan_sha256"] == read_plan(demo / "site.geojson").content_hash()


def test_the_page_names_the_verdict_and_fetches_nothing(demo):
    """One file that works offline."""
    page = (demo / "report.html").read_text()
    assert summary_of(demo)["results"]["verdict"]["sentence"] in html.unescape(page)
    assert not re.search(r"https?://(?!www\.w3\.org/)", page)  # names of XML vocabularies are never fetched
    addresses = re.findall(r"""(?:src|href|action)=["']([^"']+)""", page)
    assert addresses and all(address.startswith(("#", "data:")) for address in addresses)


def test_estimates_have_their_columns_and_a_row_a_strip(demo):
    """As DEVELOPERS.md lists them."""
    table = pq.read_table(demo / "estimates.parquet")
    assert table.column_names == ESTIMATES
    assert table.column("time_s").to_pylist() == pytest.approx(read_drive(demo / "drive.parquet").time_s)


def test_a_recorded_drive_on_a_plan_of_ones_own_is_judged(demo, office, elsewhere):
    """One drive: figures without bounds, and a verdict that says so."""
    words = [
        "ablate",
        f"model={demo}",
        f"site.file={OFFICE}",
        f"drives=[{office}/rehearse/drives/drives/0000-00.parquet]",
    ]
    assert run_command(words) == 0
    results = summary_of(Path("runs/ablate/default"))["results"]
    assert (results["drives"], results["verdict"]["ship"]) == (1, "cannot tell")
    assert {row["located"]["low"] for row in results["scores"]} == {None}
    assert Path("runs/ablate/default/report.html").exists()


def test_a_study_on_a_plan_of_ones_own_simulates_a_dozen_drives(demo, elsewhere):
    """configs/ablate.yaml: 12 times study.drives; the drives are the units."""
    words = ["ablate", f"model={demo}", f"site.file={OFFICE}", "study.drives=1", "study.rows=4"]
    assert run_command([*words, "study.mark=2"]) == 0
    results = summary_of(Path("runs/ablate/default"))["results"]
    assert (results["sites"], results["drives"], results["scores"][0]["located"]["n"]) == (1, 12, 12)


def test_a_study_too_short_for_its_verdict_is_the_users_to_mend(demo, office, elsewhere, capsys):
    """A drive of 30 strips cannot be judged after 32."""
    drive = office / "rehearse/drives/drives/0000-00.parquet"
    words = ["ablate", f"model={demo}", f"site.file={OFFICE}", f"drives=[{drive}]", "study.mark=32"]
    assert run_command(words) == 2
    assert "study.mark" in capsys.readouterr().err.splitlines()[-1]


@pytest.fixture(scope="module")
def tuned(demo, office, tmp_path_factory) -> Path:
    """Run folder of a training that went on from the demo's models on the rehearsed drive."""
    runs = tmp_path_factory.mktemp("tuned")
    words = [
        "train", "name=tuned", f"runs={runs}", "threads=1", f"start={demo}", f"site.file={OFFICE}",
        f"drives=[{GOOD}]".format(office=office), "train.recorded.iterations=2",
        "train.recorded.validate_every=1", "train.lengths=[3]", "train.validation_steps=3",
    ]  # fmt: skip
    assert run_command(words) == 0
    return runs / "train" / "tuned"


def test_tuning_on_recorded_drives_writes_the_models_it_went_on_from(demo, tuned):
    """The matcher and the best analytic one, by validation; the same tensors and sizes."""
    before, after = (
        {path.stem: load_file(path) for path in run.glob("models/*.safetensors")} for run in (demo, tuned)
    )
    nats = {name: load_tensors(demo / f"models/{name}.safetensors")[1]["validation"] for name in before}
    best = min((name for name in nats if name != "matcher"), key=lambda name: nats[name])
    assert after.keys() == {best, "matcher"}
    for name, tensors in after.items():
        sizes = [{key: value.shape for key, value in each.items()} for each in (tensors, before[name])]
        assert sizes[0] == sizes[1]


def test_tuning_changes_the_weights_of_those_models_that_it_makes_better(demo, tuned):
    """A model that only got worse on the drive keeps the weights it came with; not all of them do."""
    changed, better = {}, {}
    for path in tuned.glob("models/*.safetensors"):
        came = load_file(demo / "models" / path.name)
        changed[path.stem] = any(not np.array_equal(v, came[key]) for key, v in load_file(path).items())
        (stage,) = load_tensors(path)[1]["stages"].values()
        better[path.stem] = stage["best_iteration"] > 0
    assert changed == better and any(changed.values())


def test_tuning_keeps_sensor_and_lattice_of_the_run_it_went_on_from(demo, tuned):
    """The demo's lattice has 16 headings, which the command did not say."""
    settings = [OmegaConf.load(run / "config.yaml") for run in (demo, tuned)]
    assert settings[0].grid.headings == 16
    assert all(settings[0][key] == settings[1][key] for key in ("strip", "grid", "motion", "observe"))


def test_tuned_models_are_judged_like_any_others(tuned, office, elsewhere):
    """On rows of the same drive: blocks of ten rows, each of them a start."""
    words = [
        "ablate", f"model={tuned}", f"site.file={OFFICE}", f"drives=[{GOOD}]".format(office=office),
        "blocks={rows: 10, first: 1, every: 2}", "study.marks=[1]",
        "study.mark=1", "study.hide_colour=false",
    ]  # fmt: skip
    assert run_command(words) == 0
    results = summary_of(Path("runs/ablate/default"))["results"]
    assert (results["conditions"], results["drives"], results["sites"]) == (["as recorded"], 10, 1)
    names = {path.stem for path in tuned.glob("models/*.safetensors")}
    assert {row["contender"] for row in results["scores"]} == names
    assert {figures["contender"] for figures in results["trust"]} == names


def test_a_model_goes_to_another_plan_without_training(office):
    """The bundle names the plan by its digest, and the runtime reproduces it there too."""
    manifest = json.loads((office / "export/office/bundle/manifest.json").read_text())
    assert manifest["provenance"]["plan_sha256"] == read_plan(OFFICE).content_hash()
    assert summary_of(office / "export/office")["results"]["runtime_tv"] <= 1e-4  # as above


def test_a_verb_writes_under_its_own_runs_and_nowhere_else(demo, elsewhere):
    """Not in the folder that the training was told, which may be on another machine."""
    assert run_command(["export", f"model={demo}", f"site.file={SQUARE}", "contender=beam", "runs=mine"]) == 0
    assert [path.name for path in elsewhere.iterdir()] == ["mine"]


def test_figures_of_an_ablation_go_along(demo, elsewhere):
    """The manifest carries what the ablation found."""
    assert (
        run_command(["export", f"model={demo}", f"site.file={SQUARE}", f"ablation={demo}", "contender=beam"])
        == 0
    )
    manifest = json.loads(next(Path("runs/export").glob("*/bundle/manifest.json")).read_text())
    assert manifest["verdict"] == summary_of(demo)["results"]["verdict"]


def test_a_drive_is_replayed_strip_by_strip(office, elsewhere):
    """A row a strip, at the drive's times, and where the reference is known."""
    drive = office / "rehearse/drives/drives/0000-00.parquet"
    assert run_command(["replay", f"bundle={office}/export/office/bundle", f"drive={drive}"]) == 0
    folder = Path("runs/replay/0000-00")
    assert pq.read_table(folder / "estimates.parquet").column("time_s").to_pylist() == pytest.approx(
        read_drive(drive).time_s
    )
    results = summary_of(folder)["results"]
    assert (results["rows"], results["rows_with_reference"]) == (30, 30)


def test_labels_are_right_where_they_are_given(demo, office, elsewhere):
    """Against the simulator's own poses; rows are labelled where nine tenths of the belief agree."""
    drive = office / "rehearse/drives/drives/0000-00.parquet"
    assert run_command(["label", f"model={demo}", f"site.file={OFFICE}", f"drive={drive}"]) == 0
    labelled, true = read_drive("runs/label/0000-00/0000-00.parquet"), read_drive(drive)
    sure = np.isfinite(labelled.reference).all(axis=1)
    apart = np.hypot(*(labelled.reference - true.reference)[sure, :2].T)
    assert sure.sum() >= 15 and np.mean(apart <= 0.5) >= 0.9
    np.testing.assert_array_equal(labelled.depth_m, true.depth_m)


def test_the_square_room_has_four_places_alike(elsewhere):
    """A quarter turn changes nothing: see toy_worlds/README.md."""
    words = ["survey", f"site.file={SQUARE}", "grid.headings=16", "budget=64", "markers=1", "name=square"]
    assert run_command(words) == 0
    results = summary_of(Path("runs/survey/square"))["results"]
    assert [(group["fold"], group["move_m"]) for group in results["groups"]] == [(4, None)]
    assert results["located_share_painted"] > results["located_share"]


@pytest.fixture(scope="module")
def damaged(office, tmp_path_factory) -> Path:
    """A bundle with one byte of its weights turned over."""
    bundle = Path(
        shutil.copytree(office / "export/office/bundle", tmp_path_factory.mktemp("damaged") / "bundle")
    )
    weights = bytearray((bundle / "weights.safetensors").read_bytes())
    weights[-1] ^= 1
    (bundle / "weights.safetensors").write_bytes(weights)
    return bundle


ON_OFFICE = f"site.file={OFFICE}"
MISTAKES = [
    (("ablate", "model=nowhere"), "model"),
    (("export", "model=nowhere", ON_OFFICE), "model"),
    (("label", "model=nowhere", ON_OFFICE, f"drive={GOOD}"), "model"),
    (("ablate", "model={office}/rehearse/drives"), "model"),
    (("export", "model={demo}", ON_OFFICE, "contender=oracle"), "matcher"),
    (("label", "model={demo}", ON_OFFICE, f"drive={GOOD}", "contender=oracle"), "matcher"),
    (("ablate", "model={demo}", ON_OFFICE, f"drives=[{WIDE}]"), "180"),
    (("label", "model={demo}", ON_OFFICE, f"drive={WIDE}"), "180"),
    (("replay", "bundle={office}/export/office/bundle", f"drive={WIDE}"), "180"),
    (("ablate", "model={demo}", f"drives=[{GOOD}]"), "site.file"),
    (("replay", "bundle={damaged}", f"drive={GOOD}"), "weights.safetensors"),
    (("replay", "bundle=nowhere", f"drive={GOOD}"), "nowhere"),
    (("replay", "bundle={office}/export/office/bundle", "drive=gone.parquet"), "gone.parquet"),
    (("export", "model={demo}", ON_OFFICE, "ablation=nowhere"), "ablation"),
    (("export", "model={demo}", "site.file=gone.geojson"), "gone.geojson"),
    (("demo", "site.file=gone.geojson"), "gone.geojson"),
    *(((verb, "site.families=[attics]"), "offices") for verb in ("train", "demo", "rehearse")),
    (("ablate", "model={demo}", "site.families=[attics]"), "offices"),
    *(((verb, "site.width_m=3"), "site.width_m") for verb in ("train", "demo", "rehearse")),
    (("ablate", "model={demo}", "site.width_m=3"), "site.width_m"),
    (("ablate", "model={demo}", "study.drives=-1"), "study.drives"),
    (("ablate", "model={demo}", "study.rows=3"), "study.mark"),
    (("ablate", "model={demo}", "study.models=[beam]"), "study.models"),
    (("ablate", "model={demo}", ON_OFFICE, f"drives=[{GOOD}]", "study.oracle=true"), "study.oracle"),
    (("ablate", "model={demo}", ON_OFFICE, f"drives=[{GOOD}]", "blocks={{rows: 10, first: 3, every: 1}}"),
     "blocks"),
    (("train", "start={demo}"), "drives"),
    (("train", "start={demo}", f"drives=[{GOOD}]"), "site.file"),
    (("train", "start={demo}", ON_OFFICE, f"drives=[{WIDE}]"), "180"),
    (("train", "train.sites=-1"), "train.sites"),
    *((("train", f"train.search=[{{{{{change}}}}}]"), named) for change, named in (
        ("colums: 2", "column_step"), ("headings: 2", "headings"), ("headings: many", "headings"),
        ("headings: 4096", "bearings"))),
    (("demo", "train.search=[{{colums: 2}}]"), "column_step"),
    (("train", "train.matching.iterations=-1"), "iterations"),
    (("demo", "grid.cell_m=-1"), "grid.cell_m"),
    (("demo", "motion.turn_from_turn=-1"), "motion.turn_from_turn"),
    (("survey", ON_OFFICE, "budget=-1"), "budget"),
    (("rehearse", "rows=-1"), "rows"),
    (("plan", ON_OFFICE, "robot_radius_m=-1"), "robot_radius_m"),
    (("label", "model={demo}", ON_OFFICE, f"drive={GOOD}", "known={{-1: [0.0, 0.0, 0.0]}}"), "known"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("words", "named"), MISTAKES, ids=lambda part: " ".join(part)[:60] if type(part) is tuple else part
)
def test_a_mistake_costs_one_line_and_leaves_nothing(words, named, demo, office, damaged, elsewhere, capsys):
    """Exit code 2, a line that names what is wrong or what would be right, and not a file written."""
    places = {"demo": demo, "office": office, "damaged": damaged}
    assert run_command([word.format(**places) for word in words]) == 2
    error = capsys.readouterr().err
    assert error.startswith(f"learnfilter {words[0]}: ") and error.count("\n") == 1 and named in error
    assert [path for path in elsewhere.rglob("*") if path.is_file()] == []


@pytest.mark.parametrize("verb", VERBS)
def test_a_negative_seed_is_refused_by_every_verb(verb, elsewhere, capsys):
    """Before anything is read."""
    needed = {
        "replay": [ON_OFFICE, "bundle=some", "drive=some.csv"],
        "label": [ON_OFFICE, "drive=some.csv"],
        "verify": ["bundle=some"],
    }
    assert run_command([verb, *needed.get(verb, [ON_OFFICE]), "seed=-1"]) == 2
    assert "seed" in capsys.readouterr().err


def test_a_mistake_leaves_an_earlier_run_of_the_name_whole(office, elsewhere):
    """Settings, estimates and summary of a replay are still of one run."""
    bundle = f"bundle={office}/export/office/bundle"
    assert run_command(["replay", bundle, f"drive={GOOD}".format(office=office), "name=mine"]) == 0
    before = {path: path.read_bytes() for path in Path("runs/replay/mine").iterdir()}
    assert run_command(["replay", bundle, f"drive={WIDE}".format(office=office), "name=mine"]) == 2
    assert {path: path.read_bytes() for path in Path("runs/replay/mine").iterdir()} == before

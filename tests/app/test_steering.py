"""Movers in the chain: a policy is trained for models that are there, compared, and shipped."""

import json
import shutil
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from learnfilter.app.command import run_command
from learnfilter.app.movers import stored_policy
from learnfilter.runtime import Localizer, load_bundle, propose
from learnfilter.runtime.moves import MOTIONS
from tests.app.tiny import OFFICE, once

pytestmark = pytest.mark.slow

PRACTICE = (
    "mover=policy", "mover.practice.families=[doors]", "mover.practice.width_m=8", "mover.practice.depth_m=8",
    "mover.practice.sites=1", "mover.practice.validation_sites=1", "mover.practice.validation_episodes=2",
    "mover.practice.episodes=2", "mover.practice.strips=3", "mover.practice.lessons=4",
    "mover.practice.imitation.iterations=2", "mover.practice.imitation.validate_every=1",
    "mover.practice.trying.iterations=4", "mover.practice.trying.validate_every=2",
    "mover.practice.gradient.updates=2",
)  # fmt: skip
STUDY = (
    "movers=[wander,least-entropy,policy]", "metres=[0.5,2]", "site.families=[doors]", "site.width_m=8",
    "site.depth_m=8", "study.sites=2", "study.drives=1", "study.rows=4", "study.marks=[2,4]", "study.mark=2",
)  # fmt: skip


def train(demo: Path, runs: Path, name: str, *more: str) -> Path:
    assert run_command(["train", f"start={demo}", f"runs={runs}", f"name={name}", "threads=1", *more]) == 0
    return runs / "train" / name


@pytest.fixture(scope="session")
def moving(demo, tmp_path_factory) -> Path:
    """Run folder of a training with a policy, for the demo's models; not to be changed."""

    def make(folder: Path) -> None:
        train(demo, folder, "moving", *PRACTICE)

    return once(tmp_path_factory, "moving", make) / "train" / "moving"


def test_models_are_taken_along_as_they_are(moving, demo):
    """Byte for byte, so that the run stands on its own."""
    held = {path.name: path.read_bytes() for path in (moving / "models").iterdir()}
    del held["policy.safetensors"]
    assert held == {path.name: path.read_bytes() for path in (demo / "models").iterdir()}


def test_a_policy_says_how_it_was_trained(moving):
    """Both stages, the motions, and the score of the kept weights."""
    policy = stored_policy(moving)
    np.testing.assert_allclose(policy.motions, MOTIONS, atol=1e-12)
    assert policy.facts["stages"].keys() == {"imitation", "trying"}
    best = min(score for _, _, score in policy.facts["stages"]["trying"]["history"])
    assert policy.facts["validation"] <= best
    assert json.loads((moving / "summary.json").read_text())["results"]["mover"]["model"] == "matcher"


def test_practice_held_again_ends_with_the_same_policy(moving, demo, tmp_path):
    """From the start, and from the checkpoints alone."""
    again = train(demo, tmp_path, "moving", *PRACTICE)
    first = (again / "models" / "policy.safetensors").read_bytes()
    (again / "models" / "policy.safetensors").unlink()
    shutil.rmtree(again / "events")
    train(demo, tmp_path, "moving", *PRACTICE)
    assert (again / "models" / "policy.safetensors").read_bytes() == first
    assert first == (moving / "models" / "policy.safetensors").read_bytes()


@pytest.fixture(scope="module")
def compared(moving, tmp_path_factory) -> Path:
    """Run folder of a study of three movers with two models on two sites."""
    runs = tmp_path_factory.mktemp("compared")
    assert run_command(["ablate", f"model={moving}", f"runs={runs}", "name=movers", *STUDY]) == 0
    return runs / "ablate" / "movers"


def test_every_mover_starts_where_the_others_do(compared):
    """Three movers, two models, two sites; the first strip, before any motion, is one for all movers."""
    rows = [json.loads(line) for line in (compared / "rows.jsonl").read_text().splitlines()]
    assert len(rows) == len({(row["mover"], row["model"], row["start"]) for row in rows}) == 12
    for model in {row["model"] for row in rows}:
        for start in {row["start"] for row in rows}:
            own = [row for row in rows if (row["model"], row["start"]) == (model, start)]
            assert {row["mover"] for row in own} == {"wander", "least-entropy", "policy"}
            assert all(row["unit"] == row["site"] for row in own)


def test_a_study_of_movers_is_told_with_its_spread(compared):
    """In the summary and on the page."""
    scores = json.loads((compared / "summary.json").read_text())["results"]["movers"]
    assert len(scores) == 6
    assert all(score["lock_metres"].keys() == {"value", "low", "high", "n"} for score in scores)
    assert scores[0]["located"].keys() == {"2", "4", "0.5m", "2m"}
    assert "How soon robots know where they are" in (compared / "report.html").read_text()


@pytest.fixture(scope="module")
def exported(moving, tmp_path_factory) -> Path:
    """Its bundle for the office."""
    runs = tmp_path_factory.mktemp("exported")
    words = ["export", f"model={moving}", f"runs={runs}", "name=office", f"site.file={OFFICE}"]
    assert run_command(words) == 0
    return runs / "export" / "office" / "bundle"


def test_a_policy_goes_into_the_bundle(exported):
    """And proposes a clear motion once a strip has been seen: none ahead, where something stands."""
    localizer = Localizer(load_bundle(exported))
    depth = np.full(localizer.bundle.strip.columns, 0.2)
    localizer.step(np.zeros(3), depth)
    assert not propose(localizer, depth).travels


def test_a_replay_says_where_the_mover_would_go(exported, office, tmp_path):
    """One of its motions at every row; nothing where the bundle has no mover."""
    drive = office / "rehearse" / "drives" / "drives" / "0000-00.parquet"
    for name, bundle in (("with", exported), ("without", office / "export" / "office" / "bundle")):
        assert (
            run_command(["replay", f"runs={tmp_path}", f"name={name}", f"bundle={bundle}", f"drive={drive}"])
            == 0
        )
    moves, none = (
        pq.read_table(tmp_path / "replay" / name / "estimates.parquet").column("move").to_pylist()
        for name in ("with", "without")
    )
    assert set(none) == {None}
    assert {tuple(move) for move in moves} <= set(map(tuple, load_bundle(exported).mover.motions))


def test_a_policy_is_taken_along_where_models_are_tuned(moving, office, tmp_path):
    """Tuning changes what the robot believes, not how it moves."""
    drive = office / "rehearse" / "drives" / "drives" / "0000-00.parquet"
    stage = ("train.recorded.iterations=2", "train.recorded.validate_every=1")
    tuned = train(
        moving,
        tmp_path,
        "tuned",
        f"drives=[{drive}]",
        "site=file",
        f"site.file={OFFICE}",
        "train.lengths=[3]",
        *stage,
    )
    name = "models/policy.safetensors"
    assert (tuned / name).read_bytes() == (moving / name).read_bytes()


@pytest.mark.parametrize(
    ("words", "named"),
    [
        (("ablate", "model={demo}", "movers=[policy]"), "mover=policy"),
        (("ablate", "model={demo}", "movers=[fly]"), "movers"),
        (("ablate", "model={demo}", "movers=[wander]", "study.models=[gyro]"), "study.models"),
        (("train", "start={demo}", "mover=policy", "mover.practice.families=[moon]"), "practice.families"),
        (("train", "start={demo}", "mover=policy", "mover.practice.model=gyro"), "practice.model"),
        (("train", "start={demo}", "mover=policy", "mover.skirt_m=0"), "mover.skirt_m"),
    ],
)
def test_what_cannot_be_asked_of_movers_is_refused(words, named, demo, tmp_path, capsys):
    """One line that names the setting, and no run folder of a study or practice left behind half made."""
    assert run_command([word.format(demo=demo) for word in words] + [f"runs={tmp_path}"]) == 2
    error = capsys.readouterr().err
    assert error.splitlines()[-1].startswith(f"learnfilter {words[0]}: ") and named in error

"""The command line as its user meets it: exit codes, messages, help, sweeps."""

import logging
import os
import subprocess
import sys
from pathlib import Path

import pytest

from learnfilter.app import command, verbs
from learnfilter.app.command import run_command
from learnfilter.app.paths import data_dir
from learnfilter.app.verbs import VERBS
from learnfilter.core.errors import PlanError
from learnfilter.core.notice import SAFETY_NOTICE

TOP = Path(__file__).resolve().parents[2]
SQUARE = data_dir("toy_worlds") / "square_room.geojson"


@pytest.fixture(autouse=True)
def elsewhere(tmp_path, monkeypatch):
    """Work in an empty folder; a sweep sets these, so put them back."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "argv", ["learnfilter"])
    monkeypatch.setenv("HYDRA_FULL_ERROR", "0")


def outcome(verb_raises: BaseException, monkeypatch, capsys) -> tuple[int, str]:
    """Exit code and standard error when a verb raises."""

    def run(*_: object) -> None:
        raise verb_raises

    monkeypatch.setattr(command, "run_verb", run)
    return run_command(["plan", f"site.file={SQUARE}"]), capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "named"),
    [
        (["paln"], "paln"),
        (["plan"], "site.file"),
        (["plan", "site.fiel=x"], "site.file"),
        (["plan", "sead=1"], "seed"),
        (["plan", "seed=often"], "seed"),
        (["plan", f"site.file={SQUARE}", "seed=-1"], "seed"),
        (["plan", "site=moon"], "families"),
        (["plan", "site.file"], "site.file"),
        (["plan", "--quick"], "--quick"),
        (["plan", "--config-dir", "nowhere"], "nowhere"),
        (["plan", "site.file=gone.geojson"], "gone.geojson"),
        (["plan", "site.file=My plan (2).geojson"], "quotes"),
        (["plan", f"site.file={SQUARE}", "name=a/b"], "a/b"),
        (["survey", f"site.file={SQUARE}", "strip=radar"], "scanner-180"),
        (["ablate", "drives=[a.parquet]"], "site.file"),
        (["ablate", "conditions=[moon]"], "moon"),
        (["ablate", "conditions=[as-trained+moon]"], "moon"),
        (["ablate", "conditions=[]"], "conditions"),
        (["train", "part=moon"], "no-residual"),
        (["train", "start=some"], "drives"),
        (["train", "drives=[a.parquet]"], "start"),
        (["train", "start=some", "drives=[a.parquet]"], "site.file"),
        (["train", "start=nowhere", "drives=[a.parquet]", f"site.file={SQUARE}"], "nowhere"),
        (["label", f"site.file={SQUARE}", "drive=a.csv", "known={0: [1, 2]}"], "heading_deg"),
        (["rehearse", "site.families=[attics]"], "offices"),
        (["rehearse", "condition.people=-1"], "condition.people"),
        (["rehearse", "site.width_m=3"], "site.width_m"),
    ],
)
def test_a_mistake_costs_one_line_and_exit_code_2(words, named, capsys, tmp_path):
    """The line names what is wrong or what would be right; nothing is written."""
    assert run_command(words) == 2
    error = capsys.readouterr().err
    assert error.startswith("learnfilter") and error.count("\n") == 1 and named in error
    assert list(tmp_path.iterdir()) == []


def test_an_input_error_is_one_line(monkeypatch, capsys):
    """The error's own text is the message."""
    code, error = outcome(PlanError("no walls", file="a.geojson"), monkeypatch, capsys)
    assert (code, error) == (2, "learnfilter plan: a.geojson: no walls\n")


def test_a_file_that_cannot_be_written_is_the_users_to_mend(monkeypatch, capsys):
    """A full disk is not our fault, and the line names the file."""
    code, error = outcome(OSError(28, "No space left on device", "a.csv"), monkeypatch, capsys)
    assert (code, error) == (2, "learnfilter plan: a.csv: cannot be used (No space left on device)\n")


def test_an_interrupt_ends_with_130(monkeypatch, capsys):
    """As shells expect after Ctrl-C (128 + SIGINT)."""
    assert outcome(KeyboardInterrupt(), monkeypatch, capsys) == (130, "learnfilter plan: stopped\n")


def test_our_fault_is_one_line_and_keeps_the_traceback_in_a_file(monkeypatch, capsys, tmp_path):
    """The user can send the file; the terminal stays readable."""
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    code, error = outcome(ZeroDivisionError("oops"), monkeypatch, capsys)
    (kept,) = tmp_path.glob("learnfilter-*.txt")
    assert (code, error.count("\n")) == (1, 1) and str(kept) in error
    assert "Traceback" in kept.read_text()


def test_help_shows_every_verb_and_the_safety_notice(capsys):
    """G7 of the check values: the notice belongs in the command's help."""
    assert run_command(["--help"]) == 0
    said = " ".join(capsys.readouterr().out.split())
    assert SAFETY_NOTICE in said and all(f"learnfilter {verb} " in said for verb in VERBS)


def test_no_verb_is_a_mistake_that_shows_help(capsys):
    """A bare command teaches, and scripts see that nothing ran."""
    assert run_command([]) == 2
    assert "learnfilter VERB" in capsys.readouterr().out


@pytest.mark.parametrize("verb", VERBS)
def test_the_help_of_a_verb_shows_its_settings_with_comments(verb, capsys):
    """Defaults and comments come from the settings files; importing torch for it would take seconds."""
    assert run_command([verb, "--help"]) == 0
    said = capsys.readouterr().out
    assert "seed: 0         # same seed" in said and f"learnfilter {verb} " in said


def test_every_verb_has_a_module():
    """The table names modules beside it."""
    folder = Path(verbs.__file__).parent
    assert {path.stem for path in folder.glob("[a-z]*.py")} == VERBS.keys()


def test_settings_of_ones_own_are_taken_from_a_folder(tmp_path, capsys):
    """--config-dir adds options to the groups."""
    (tmp_path / "own" / "site").mkdir(parents=True)
    text = (data_dir("configs") / "site" / "file.yaml").read_text().replace("???", str(SQUARE))
    (tmp_path / "own" / "site" / "mine.yaml").write_text(text)
    assert run_command(["plan", "--config-dir", "own", "site=mine"]) == 0
    assert "4.0 x 4.0 m" in capsys.readouterr().out


def test_a_condition_of_ones_own_is_looked_for_in_that_folder(tmp_path, capsys):
    """fog.yaml is found, so what is missing is only the training run; without the folder, fog itself is."""
    (tmp_path / "own" / "condition").mkdir(parents=True)
    (tmp_path / "own" / "condition" / "fog.yaml").write_text("light_level: 0.5\n")
    words = ["ablate", "model=nowhere", "conditions=[fog+crowd]"]
    said = []
    for where in (["--config-dir", "own"], []):
        assert run_command([*words, *where]) == 2
        said.append(capsys.readouterr().err)
    assert "nowhere" in said[0] and "fog" not in said[0] and "fog" in said[1]


def test_a_sweep_runs_each_value_in_a_folder_of_its_own(tmp_path):
    """Names of the runs say what was varied, and nothing else: with every setting they outgrow file names."""
    alike = ["site.file=" + os.path.relpath(SQUARE), "robot_radius_m=0.2", "name=s"]
    assert run_command(["plan", "-m", *alike, "seed=1,2"]) == 0
    folders = {path.name for path in (tmp_path / "runs" / "plan").iterdir() if path.is_dir()}
    assert folders == {"s,seed=1", "s,seed=2"}


def test_a_sweep_leaves_our_warnings_on():
    """What a plan's reader ignores is said in the jobs of a sweep too."""
    assert run_command(["plan", "-m", f"site.file={SQUARE}", "name=s"]) == 0
    assert not logging.getLogger("learnfilter.plan.geographic").disabled


def test_a_sweep_with_a_mistake_ends_with_2(capsys):
    """The policy for errors holds in sweeps too."""
    assert run_command(["plan", "-m", f"site.file={SQUARE}", "seed=-1,-2"]) == 2
    assert "seed" in capsys.readouterr().err.splitlines()[-1]


@pytest.mark.slow
def test_a_sweep_runs_side_by_side(tmp_path):
    """The joblib launcher takes the same command."""
    words = [
        "plan",
        "-m",
        f"site.file={SQUARE}",
        "seed=1,2",
        "hydra/launcher=joblib",
        "hydra.launcher.n_jobs=2",
    ]
    done = subprocess.run(
        [sys.executable, "-m", "learnfilter.app.main", *words],
        env={**os.environ, "PYTHONPATH": str(TOP)},
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    assert len(list((tmp_path / "runs" / "plan").glob("*/summary.json"))) == 2

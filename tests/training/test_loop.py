"""The training loop: it learns, stops, resumes to the byte, and keeps the best weights."""

import os
import signal
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest
import torch
from numpy.testing import assert_allclose
from torch.testing import assert_close

from learnfilter.training.loop import StageSettings
from tests.training.tiny import SETTINGS, Silent, line, run


def weights(model):
    return torch.cat([p.detach().flatten() for p in model.parameters()])


def files(folder):
    return {path.name: path.read_bytes() for path in sorted(Path(folder).iterdir())}


@pytest.fixture
def uninterrupted(tmp_path):
    """What a whole run leaves: its folder's bytes and its weights."""
    model = line()
    run(tmp_path / "whole", model)
    return files(tmp_path / "whole"), weights(model)


def stop_after(iterations):
    def tick(done, total, note):
        if done == iterations:
            raise KeyboardInterrupt

    return tick


@pytest.mark.parametrize("iterations", [3, 10, 47])
@pytest.mark.parametrize("fresh", [True, False])
def test_an_interrupted_run_ends_with_the_same_bytes(tmp_path, uninterrupted, iterations, fresh):
    """Stopped before the first validation, at one, and between two; taken up in a new process's fresh model
    or with the half-trained one."""
    model = line()
    with pytest.raises(KeyboardInterrupt):
        run(tmp_path / "run", model, tick=stop_after(iterations))
    model = line() if fresh else model
    run(tmp_path / "run", model)
    assert files(tmp_path / "run") == uninterrupted[0]
    assert_close(weights(model), uninterrupted[1], rtol=0, atol=0)


def test_a_killed_run_ends_with_the_same_bytes(tmp_path, uninterrupted):
    """A real process, killed with signal 9 in the middle of its 25th iteration or a little later."""
    script = str(Path(__file__).with_name("tiny.py"))
    environment = os.environ | {"PYTHONPATH": str(Path(__file__).parents[2])}
    with subprocess.Popen(
        [sys.executable, script, str(tmp_path / "run")], stdout=subprocess.PIPE, env=environment
    ) as process:
        for told in process.stdout:
            if int(told) >= 25:
                os.kill(process.pid, signal.SIGKILL)
                break
    assert process.returncode == -signal.SIGKILL
    assert (tmp_path / "run" / "fit.safetensors").exists()
    model = line()
    run(tmp_path / "run", model)
    left = {name: data for name, data in files(tmp_path / "run").items() if not name.endswith(".part")}
    assert left == uninterrupted[0]
    assert_close(weights(model), uninterrupted[1], rtol=0, atol=0)


def test_a_finished_run_is_not_run_again(tmp_path, uninterrupted):
    """Called once more it loads the best weights and makes no step."""
    run(tmp_path / "run", line())
    ticks = []
    model = line()
    result = run(tmp_path / "run", model, tick=lambda *told: ticks.append(told))
    assert not ticks
    assert result.iterations == SETTINGS.iterations
    assert_close(weights(model), uninterrupted[1], rtol=0, atol=0)


def test_the_line_is_found(tmp_path):
    """y = 2 a - b + 1/2; after 300 iterations of Adam that fade out, to a hundredth."""
    model = line()
    run(tmp_path, model, settings=replace(SETTINGS, iterations=300))
    assert_close(weights(model), torch.tensor([2.0, -1.0, 0.5]), rtol=0, atol=0.01)


def test_another_seed_gives_other_weights(tmp_path, uninterrupted):
    """The draws matter, so equal bytes above are no accident."""
    model = line()
    run(tmp_path / "run", model, seed=1)
    assert not torch.equal(weights(model), uninterrupted[1])


def test_the_best_weights_are_kept(tmp_path):
    """Scores fall until the 20th iteration and rise again: the weights of a run that ends there are left."""
    model, short = line(), line()
    result = run(tmp_path / "long", model, scores=iter([5, 4, 1, 2, 3, 4, 5]))
    with pytest.raises(KeyboardInterrupt):
        run(tmp_path / "short", short, tick=stop_after(20))
    assert (result.best_iteration, result.best_score) == (20, 1)
    assert_close(weights(model), weights(short), rtol=0, atol=0)


def test_weights_that_never_improve_are_left_as_they_were(tmp_path):
    """The start was the best: it comes back."""
    model = line()
    result = run(tmp_path, model, scores=iter([1, 2, 3, 4, 5, 6, 7]))
    assert result.best_iteration == 0
    assert_close(weights(model), weights(line()), rtol=0, atol=0)


def test_a_stage_stops_when_patience_is_out(tmp_path):
    """Best at 10, two validations without a better one: 30 iterations of 60."""
    settings = replace(SETTINGS, patience=2)
    result = run(tmp_path, line(), settings=settings, scores=iter([5, 1, 2, 3, 0, 0, 0]))
    assert (result.iterations, result.best_iteration) == (30, 10)


def test_a_stage_of_no_iterations_touches_nothing(tmp_path):
    """Skipped: no files, the same weights."""
    model = line()
    run(tmp_path, model, settings=replace(SETTINGS, iterations=0))
    assert not list(tmp_path.iterdir())
    assert_close(weights(model), weights(line()), rtol=0, atol=0)


@pytest.mark.parametrize(
    ("iteration", "expected"), [(0, 0.01), (10, 0.0975528), (50, 0.05), (75, 0.0146447), (100, 0.0)]
)
def test_the_learning_rate_warms_up_and_falls_along_a_cosine(iteration, expected):
    """Peak 0.1, ten iterations of warm-up: a tenth at the first; 0.1 (1 + cos(pi i / 100)) / 2 after."""
    settings = StageSettings("fit", 100, learning_rate=0.1, warm_up=10)
    assert_allclose(settings.rate(iteration), expected, atol=1e-7)


def test_validations_are_logged(tmp_path):
    """Loss, score, learning rate and the model's own curves, at every validation."""
    log = Silent()
    run(tmp_path, line(), log=log)
    iterations = [9, 19, 29, 39, 49, 59]
    assert set(log.scalars) == {f"fit/{name}" for name in ("loss", "validation", "learning_rate", "error")}
    assert all([i for i, _ in rows] == iterations for rows in log.scalars.values())

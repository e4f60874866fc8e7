"""A stage that trains in milliseconds: a line fitted to points drawn anew each iteration."""

import sys
import time
from pathlib import Path

import torch
from torch import nn

from learnfilter.core.seeds import stream
from learnfilter.training.loop import StageSettings, Validation, run_stage

SETTINGS = StageSettings("fit", iterations=60, learning_rate=0.05, warm_up=5, validate_every=10)


class Silent:
    """A log that keeps what it is told."""

    def __init__(self):
        self.scalars = {}

    def scalar(self, tag, value, iteration):
        self.scalars.setdefault(tag, []).append((iteration, value))

    def belief(self, tag, plane, iteration):
        raise AssertionError("no picture was made")


def line(seed=0):
    """A fresh model."""
    model = nn.Linear(2, 1)
    weights = stream(seed, "weights").normal(size=3)
    with torch.no_grad():
        model.weight.copy_(torch.tensor(weights[None, :2]))
        model.bias.fill_(weights[2])
    return model


def run(folder, model, seed=0, settings=SETTINGS, tick=lambda done, total, note: None, scores=None, log=None):
    """Train; `scores` replaces the validation."""

    def points(*path):
        x = torch.tensor(stream(seed, *path).normal(size=(16, 2)), dtype=torch.float32)
        return x, x @ torch.tensor([[2.0], [-1.0]]) + 0.5

    def loss_at(iteration):
        x, y = points("train", iteration)
        return (model(x) - y).square().mean()

    def validate():
        x, y = points("validation")
        with torch.no_grad():
            score = float((model(x) - y).square().mean())
        return Validation(score if scores is None else next(scores), {"error": score})

    return run_stage(settings, {"model": model}, loss_at, validate, Path(folder), log or Silent(), tick)


def linger(done, total, note):
    """Say where we are and take a moment, so that there is time to be killed."""
    print(done, flush=True)
    time.sleep(0.02)


if __name__ == "__main__":
    run(sys.argv[1], line(), tick=linger)

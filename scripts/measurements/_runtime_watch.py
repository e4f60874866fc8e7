"""Surprise and alarms where the plan is true, and what becomes of a robot that is carried off."""

from __future__ import annotations

import tempfile
from itertools import pairwise
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from _robot import matcher, site, steps
from _runs import SEEDS, say
from scipy.stats import kstest

from learnfilter.ablation.statistics import paired_bootstrap, wilson
from learnfilter.app.exporting import export_bundle
from learnfilter.core.seeds import stream
from learnfilter.drives.drive import Drive
from learnfilter.drives.metrics import located
from learnfilter.runtime import Bundle, Localizer, load_bundle

# Drives a site on which the plan is true, and on which the robot is carried off.
SITES, TRUE_DRIVES, CARRIED = 4, 40, 40
ROWS, BEFORE, AFTER = 34, 22, 12
DIFFERENT_M = 0.5  # median difference of what the plan predicts at two places that look different


class Told(NamedTuple):
    """Of one site.

    Attributes:
        p: p-value of one strip, drawn at random, of each drive on which the plan is true.
        strips, false: weighed on those drives, and how often the search began anew from a right estimate.
        declared: weighed strips until 'lost', of each robot that was locked and carried off; 99: never.
        again, fresh: whether each was right after AFTER strips, and whether one just switched on there was.
    """

    p: list[float]
    strips: int
    false: int
    declared: list[int]
    again: list[float]
    fresh: list[float]


def watch() -> dict[str, Any]:
    """Figures over all sites and training seeds."""
    told = []
    for seed in SEEDS:
        for number in range(SITES):
            say(f"watch: seed {seed}, site {number}")
            told.append(watched(seed, number))
    strips, false = sum(each.strips for each in told), sum(each.false for each in told)
    p_values = [p for each in told for p in each.p]
    declared = [strip for each in told for strip in each.declared]
    again = np.array([right for each in told for right in each.again])
    fresh = np.array([right for each in told for right in each.fresh])
    units = [str(number) for number, each in enumerate(told) for _ in each.again]
    apart = paired_bootstrap(again, fresh, units, rng=stream(0, "runtime", "carried off"))
    return {
        "p_values_uniform": float(kstest(p_values, "uniform").pvalue),
        "p_values": len(p_values),
        "false_alarm_rate": wilson(false, strips).as_dict(),
        "lost_declared_5": wilson(sum(strip <= 5 for strip in declared), len(declared)).as_dict(),
        "lost_declared_median": float(np.median(declared)),
        "relocated_12_minus_fresh": apart.as_dict(),
        "relocated_12": float(again.mean()),
        "fresh_12": float(fresh.mean()),
    }


def watched(seed: int, number: int) -> Told:
    """One site of one training seed."""
    settings, model = matcher(seed)
    plan, drives = site(10 + SITES * seed + number, ROWS, TRUE_DRIVES + 2 * CARRIED, settings)
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch) / "bundle"
        export_bundle(settings, model, plan, folder)
        bundle = load_bundle(folder)
    localizer, rng = Localizer(bundle), stream(seed, "runtime", "watch", number)
    p, strips, false = [], 0, 0
    for drive in drives[:TRUE_DRIVES]:
        localizer.reset()
        answers = [(row, answer) for row, answer in enumerate(steps(localizer, drive)) if answer.weighed]
        p.append(float(rng.choice([answer.surprise for _, answer in answers])))
        strips += len(answers)
        # where the estimate before was wrong the robot was lost indeed
        false += sum(
            now.anew and bool(located(before.pose, _reference(drive)[row]))
            for (row, before), (_, now) in pairwise(answers)
        )
    declared, again, fresh = [], [], []
    for there, then in zip(drives[TRUE_DRIVES::2], drives[TRUE_DRIVES + 1 :: 2], strict=True):
        begin = elsewhere(bundle, there, then, rng)
        localizer.reset()
        locked = [answer.state for answer in steps(localizer, there, 0, BEFORE)][-1] == "locked"
        if begin is None or not locked:
            continue  # nothing to be lost
        states, right = after(localizer, then, begin)
        declared.append(next((n for n, state in enumerate(states, 1) if state == "lost"), 99))
        again.append(right)
        localizer.reset()
        fresh.append(after(localizer, then, begin)[1])
    return Told(p, strips, false, declared, again, fresh)


def _reference(drive: Drive) -> np.ndarray:
    assert drive.reference is not None, "simulated drives have one"
    return drive.reference


def after(localizer: Localizer, drive: Drive, begin: int) -> tuple[list[str], float]:
    """States after each of the next weighed strips, and whether the last estimate is right."""
    states: list[str] = []
    right = 0.0
    for row, answer in enumerate(steps(localizer, drive, begin), begin):
        if answer.weighed:
            states.append(answer.state)
            right = float(located(answer.pose, _reference(drive)[row]))
        if len(states) == AFTER:
            break
    return states, right


def elsewhere(bundle: Bundle, there: Drive, then: Drive, rng: np.random.Generator) -> int | None:
    """A row of the other drive that is over a metre away and looks different by the plan; None: none is."""
    left, poses = there.sensor_reference()[BEFORE - 1], then.sensor_reference()
    here = predicted(bundle, left)
    for row in rng.permutation(len(poses) - AFTER - 1):
        far = np.hypot(*(poses[row] - left)[:2]) > 1.0
        if far and np.median(np.abs(predicted(bundle, poses[row]) - here)) > DIFFERENT_M:
            return int(row)
    return None


def predicted(bundle: Bundle, sensor: np.ndarray) -> np.ndarray:
    """[w] range that the plan predicts for a sensor's pose, at most the sensor's reach."""
    grid, layout = bundle.site.grid, bundle.site.layout
    row, column = grid.cell_of(sensor[0], sensor[1])
    cell = int(np.argmin(((bundle.site.cells - [row, column]) ** 2).sum(axis=1)))
    turned = int(np.rint(sensor[2] / layout.step_rad)) + layout.first
    looks_at = (turned + np.arange(layout.columns)) % layout.bearings
    return np.minimum(bundle.site.range_m[cell, looks_at], bundle.strip.max_range_m)

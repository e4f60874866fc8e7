"""Does the learned model win where it will be used?  One JSON object (scripts/measure evidence).

Three trainings (seeds 0, 1, 2) are judged on unseen sites under every condition of configs/condition,
beside the analytic model that did best on their validation drives; beside an oracle as trained and on unseen
layouts; and on a real log, if the open data folder is here.  Intervals are 95 %, paired by drive, bootstrap
over the sites of all seeds together.  Progress goes to standard error; runs are kept in runs/measure-evidence
and taken up again.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
from _runs import RUNS, SEEDS, command, say, spread, train

from learnfilter.app.threads import wait_passively

wait_passively()

from learnfilter.ablation.statistics import Interval, bootstrap, paired_bootstrap  # noqa: E402
from learnfilter.ablation.study import MARKS, Row, read_rows  # noqa: E402
from learnfilter.ablation.trust import trust  # noqa: E402
from learnfilter.ablation.verdict import column, conditions_of, drives_of, under  # noqa: E402
from learnfilter.core.seeds import stream  # noqa: E402

# As trained and parked are judged on more sites: what is said of confidence there asks for many strips.
USUAL_SITES, SHIFTED_SITES, DRIVES, ROWS = 32, 16, 1, 44
ORACLE_SITES = 24
AS_TRAINED, NEW_LAYOUT, PARKED = "as-trained", "unseen-layout", "parked"
GAP_MARKS, LEAST_GAP = (1, 2, 4, 8), 0.05
LOG = Path("../shared/data/logs/lab-a.parquet")
# The picture's grey levels and place are in the note beside it.
ON_LOG = (
    "site=file", f"site.file={LOG.with_name('lab-a-occupancy.png')}", "site.metres_per_pixel=0.05",
    "site.wall_grey=[0,60]", "site.free_grey=[240,255]", "site.left_m=-21.227", "site.bottom_m=-34.125",
    f"drives=[{LOG}]",
)  # fmt: skip
SCANNER = (
    "strip=scanner-180", "grid.robot_radius_m=0.15", "site.families=[offices,partitions,doors,pods]",
    "train.sites=64", "train.stills=128", "train.search=[{headings: 64},{column_step: 2}]",
    "train.matching.iterations=700", "train.filtering.iterations=80",
)  # fmt: skip
LOG_MARKS = (1, 3, 10)
# Rows that made the plan are left out: blocks 1, 3, 5, ... of ten; halves of those for cross-fitting.
HELD_OUT, HALVES = "{rows: 10, first: 1, every: 2}", (1, 3)


def main() -> None:
    """Measure everything and print it."""
    trained = [train("seed", seed) for seed in SEEDS]
    folders = [folder for folder, _ in trained]
    shifted = sorted(path.stem for path in Path("configs/condition").glob("*.yaml"))
    shifted = [name for name in shifted if name not in (AS_TRAINED, PARKED)]
    rows = [
        *studied(folders, "usual", (f"conditions=[{AS_TRAINED},{PARKED}]", f"study.sites={USUAL_SITES}")),
        *studied(folders, "shifted", (f"conditions=[{','.join(shifted)}]", f"study.sites={SHIFTED_SITES}")),
    ]
    known = studied(
        folders, "oracle",
        (f"conditions=[{AS_TRAINED},{NEW_LAYOUT}]", f"study.sites={ORACLE_SITES}",
         f"study.marks={list(GAP_MARKS)}", "study.oracle=true"),
    )  # fmt: skip
    figures = {
        "train_minutes": spread([minutes for _, minutes in trained]),
        **gains(rows),
        **gaps(known),
        **confidence(rows),
        "horizon_ok": all(not worse for worse in horizons(rows).values()),
        "horizon_worse": {name: worse for name, worse in horizons(rows).items() if worse},
        **real_log(),
    }
    print(json.dumps(figures, indent=2))


def opponent(folder: Path) -> str:
    """The analytic model with the fewest nats on the run's validation drives."""
    nats = json.loads((folder / "summary.json").read_text())["results"]["validation_nats"]
    return min((name for name in nats if name != "matcher"), key=lambda name: nats[name])


def studied(folders: Sequence[Path], name: str, words: Sequence[str]) -> list[Row]:
    """Rows of the matcher, of the best analytic model under one name, and of an oracle; seeds kept apart.

    Two studies run side by side with a thread each, which is faster than one with two.
    """

    def study(folder: Path) -> list[Row]:
        best = opponent(folder)
        say(f"{name}: {folder.name}")
        command(
            "ablate", f"model={folder}", f"name={name}-{folder.name}", f"seed={folder.name[-1]}", "threads=1",
            f"study.models=[matcher,'{best}']", "study.hide_colour=false", f"study.drives={DRIVES}",
            f"study.rows={ROWS}", *words,
        )  # fmt: skip
        rows = read_rows(RUNS / "ablate" / f"{name}-{folder.name}" / "rows.jsonl")
        for row in rows:
            row["contender"] = "analytic" if row["contender"] == best else row["contender"]
            for key in ("unit", "drive"):
                row[key] = f"{folder.name}/{row[key]}"
        return rows

    with ThreadPoolExecutor(2) as pool:
        return [row for rows in pool.map(study, folders) for row in rows]


def gain(rows: Sequence[Row], key: str, sign: float = 1.0) -> Interval:
    """Matcher minus analytic, paired by drive."""
    order, units = drives_of(rows)
    ours, theirs = (column(rows, name, key, order) for name in ("matcher", "analytic"))
    return paired_bootstrap(sign * ours, sign * theirs, units, rng=stream(0, "evidence", key))


def gains(rows: Sequence[Row]) -> dict[str, Any]:
    """Gains under changed conditions, and where they are least sure."""
    shifted = [row for row in rows if row["condition"] != AS_TRAINED]
    found = {
        (name, mark): gain(under(rows, name), f"located_{mark}")
        for name in conditions_of(rows)
        for mark in MARKS
    }
    worst = min(found, key=lambda key: found[key].low)
    return {
        "shifted_gain_4": gain(shifted, "located_4").as_dict(),
        "shifted_nll_gain_4": gain(shifted, "nll_4", -1.0).as_dict(),
        "worst_condition_low": found[worst].low,
        "worst_condition": {"condition": worst[0], "strips": worst[1], **found[worst].as_dict()},
        "located_fewer": [
            {"condition": name, "strips": mark, **interval.as_dict()}
            for (name, mark), interval in found.items()
            if interval.value < 0
        ],
        "comparisons": len(found),
        "gain_4_by_condition": {
            name: interval.as_dict() for (name, mark), interval in found.items() if mark == 4
        },
    }


def gaps(rows: Sequence[Row]) -> dict[str, Any]:
    """Share of the gap between the best analytic model and the oracle that the matcher closes.

    Mean over the numbers of strips, up to 8, at which that gap is at least LEAST_GAP.
    """
    out: dict[str, Any] = {}
    for measure, sign in (("located", 1.0), ("nll", -1.0)):
        for name in (AS_TRAINED, NEW_LAYOUT):
            own = under(rows, name)
            order, units = drives_of(own)
            table = {
                who: np.stack([sign * column(own, who, f"{measure}_{m}", order) for m in GAP_MARKS])
                for who in ("matcher", "analytic", "oracle")
            }

            def closed(picked: np.ndarray, table=table) -> float:
                ours, theirs, best = (
                    np.nanmean(table[who][:, picked], axis=1) for who in ("matcher", "analytic", "oracle")
                )
                wide = best - theirs >= LEAST_GAP
                return float(np.mean(((ours - theirs) / (best - theirs))[wide])) if wide.any() else math.nan

            out[f"gap_closed_{measure}{'' if name == AS_TRAINED else '_unseen_layout'}"] = over_units(
                closed, units, stream(0, "gap", measure, name)
            )
        order, _ = drives_of(rows)
        out[f"oracle_{measure}_1_2_4_8"] = [
            float(np.nanmean(column(rows, "oracle", f"{measure}_{m}", order))) for m in GAP_MARKS
        ]
    return out


def over_units(
    statistic: Callable[[np.ndarray], float], units: np.ndarray, rng: np.random.Generator
) -> dict[str, Any]:
    """A statistic of picked drives with its percentile interval, units drawn with replacement."""
    groups = [np.flatnonzero(units == name) for name in np.unique(units)]
    drawn = [
        statistic(np.concatenate([groups[int(k)] for k in rng.integers(len(groups), size=len(groups))]))
        for _ in range(500)
    ]
    low, high = np.nanpercentile(drawn, (2.5, 97.5))
    return Interval(statistic(np.arange(len(units))), float(low), float(high), len(groups)).as_dict()


def confidence(rows: Sequence[Row]) -> dict[str, Any]:
    """Whether the matcher's own confidence can be believed, as trained and parked."""
    usual, parked = under(rows, AS_TRAINED), under(rows, PARKED)
    ours, theirs = (trust(usual, name, stream(0, "trust", name)) for name in ("matcher", "analytic"))
    still = trust(parked, "matcher", stream(0, "trust", "parked"))
    every = {
        who: float(np.mean([row["false_lock"] for row in rows if row["contender"] == who]))
        for who in ("matcher", "analytic")
    }
    return {
        "calibration_error": ours.calibration.as_dict() | {"strips": ours.strips},
        "coverage_error": ours.coverage.as_dict(),
        "false_locks": ours.false_locks.as_dict(),
        "false_locks_ratio": ours.false_locks.value / max(theirs.false_locks.value, 1e-9),
        "false_locks_parked": still.false_locks.as_dict(),
        "false_locks_all_conditions": every,
        "lock_metres": ours.lock_metres.as_dict(),
        "lock_metres_analytic": theirs.lock_metres.as_dict(),
    }


def horizons(rows: Sequence[Row]) -> dict[str, list[str]]:
    """Condition -> comparisons (32 with 16 strips, 16 with 8) in which the matcher is worse beyond doubt."""
    found: dict[str, list[str]] = {}
    for name in conditions_of(rows):
        own = under(rows, name)
        order, units = drives_of(own)
        at = {mark: column(own, "matcher", f"located_{mark}", order) for mark in (8, 16, 32)}
        found[name] = [
            f"{late} < {early}"
            for early, late in ((8, 16), (16, 32))
            if paired_bootstrap(at[late], at[early], units, rng=stream(0, "horizon", name, late)).high < 0
        ]
    return found


def real_log() -> dict[str, Any]:
    """Models trained in toy worlds on a real log, and the same tuned on the other half of its drives."""
    if not LOG.exists():
        say(f"{LOG} is not here: lab_a_* left out")
        return {}
    toy, tuned = [], []
    for seed in SEEDS:
        folder, _ = train("scanner", seed, *SCANNER)
        toy += on_log(folder, f"toy-{seed}", HELD_OUT, seed)
        for half, other in (HALVES, HALVES[::-1]):
            name = f"tuned-{half}"
            better, _ = train(
                name, seed, f"start={folder}", *ON_LOG, f"blocks={{rows: 10, first: {half}, every: 4}}"
            )
            tuned += on_log(
                better, f"{name}-{seed}", f"{{rows: 10, first: {other}, every: 4}}", seed, opponent(folder)
            )
    return {
        "lab_a_toy": [located_on_log(toy, "matcher", mark) for mark in LOG_MARKS],
        "lab_a_beam": [located_on_log(toy, "analytic", mark) for mark in LOG_MARKS],
        "lab_a_toy_minus_beam": [gain(toy, f"located_{mark}").as_dict() for mark in LOG_MARKS],
        "lab_a_tuned": [located_on_log(tuned, "matcher", mark) for mark in LOG_MARKS],
        "lab_a_tuned_minus_beam": [gain(tuned, f"located_{mark}").as_dict() for mark in LOG_MARKS],
    }


def located_on_log(rows: Sequence[Row], who: str, mark: int) -> dict[str, Any]:
    """Located share after so many strips; blocks of the log are the units."""
    order, units = drives_of(rows)
    values = column(rows, who, f"located_{mark}", order)
    return bootstrap(values, units, rng=stream(0, "log", mark)).as_dict()


def on_log(folder: Path, name: str, blocks: str, seed: int, best: str | None = None) -> list[Row]:
    """Rows of the matcher and of the best beam on the real log, seeds kept apart."""
    best = best or opponent(folder)
    command(
        "ablate", f"model={folder}", f"name={name}", f"seed={seed}", *ON_LOG, f"blocks={blocks}",
        f"study.models=[matcher,'{best}']", f"study.marks={list(LOG_MARKS)}", "study.mark=3",
        "study.within_m=0.75", "study.within_deg=20", "study.hide_colour=false",
    )  # fmt: skip
    rows = read_rows(RUNS / "ablate" / name / "rows.jsonl")
    for row in rows:
        row["contender"] = "analytic" if row["contender"] == best else row["contender"]
        row["drive"] = f"seed {seed}: {row['drive']}"
    return rows


if __name__ == "__main__":
    main()

"""Run a bundle over a recorded drive and see where the robot found itself, where it was lost, and why.

Every strip goes through the NumPy runtime, exactly as on the robot. You get what happened in sentences
(locked where, and rightly or not; lost through which strips), the parts of the plan that a locked robot
found otherwise than drawn, and in the run's folder report.html, replay.png, summary.json and
estimates.parquet (pose, covariance, mass, entropy, surprise, state and proposed move a row). With
site.file=PATH the trail is drawn on your plan, without it on the surfaces that the bundle knows. Several
bundles are laid side by side: bundle=[a,b] writes estimates-NAME.parquet for each. The drive may be longer
than memory.

Example:
  learnfilter replay bundle=runs/export/office/bundle drive=tuesday.parquet site.file=office.geojson
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from contextlib import ExitStack
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan
from learnfilter.app.pages import provenance, settings_text
from learnfilter.app.replay_page import (
    charts,
    comparison,
    confidence,
    headline,
    lines,
    seen_surfaces,
    stories,
    timeline,
    trail_map,
)
from learnfilter.app.replaying import Replayed, replay_bundle
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import ReplayConfig
from learnfilter.core.files import whole_file
from learnfilter.drives.tables import iter_rows
from learnfilter.plan import FloorPlan
from learnfilter.report import RunPage, draw_replay, write_page
from learnfilter.runtime import Bundle, load_bundle


def run(settings: ReplayConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    drive = Path(settings.drive)
    bundles = dict(zip(short_names(settings.bundles), map(load_bundle, settings.bundles), strict=True))
    site = next(iter(bundles.values())).site
    given = build_plan(settings.site) if settings.site.file else None
    plan = given or seen_surfaces(site, site.grid)
    folder = open_run("replay", settings.name or drive.stem, settings, replace=True)
    replays = _replay(bundles, settings, folder.path)
    cautions = [*_changed(bundles, given), *_colourless(replays)]
    for caution in cautions:
        print(f"learnfilter replay: {caution}", file=sys.stderr)
    drawn = trail_map(replays, plan, f"{drive.stem} through {', '.join(settings.bundles)}")
    draw_replay(drawn, folder.path / "replay.png")
    write_page(
        RunPage(
            title=folder.path.name,
            verb="replay",
            headline=headline(replays),
            confidence=confidence(replays),
            job=f"Run {', '.join(settings.bundles)} over {drive}.",
            trail_maps=(drawn,),
            timelines=(timeline(replays),),
            stories=stories(replays),
            tables=(comparison(replays),),
            charts=charts(replays),
            cautions=tuple(cautions),
            provenance=provenance(settings, {n: b.manifest["sha256"] for n, b in bundles.items()}),
            settings=settings_text(settings),
        ),
        folder.path / "report.html",
    )
    print("\n".join(lines(replays)))
    print(f"written: {folder.path} (report.html, replay.png, {', '.join(_tables(bundles).values())})")
    first = next(iter(replays.values())).summary()
    return folder.finish(
        {
            **{key: first[key] for key in ("rows", "rows_with_reference")},
            "cautions": cautions,
            "bundles": [{"name": name, **replayed.summary()} for name, replayed in replays.items()],
        }
    )


def short_names(paths: Sequence[str]) -> list[str]:
    """A name for each of several different folders: as many of their last parts as tell them apart."""
    parts = [Path(path).resolve().parts[1:] for path in paths]
    most = max(map(len, parts))
    tails = (["-".join(own[-count:]) for own in parts] for count in range(1, most + 1))
    return next((names for names in tails if len(set(names)) == len(names)), list(paths))


def _tables(bundles: dict[str, Bundle]) -> dict[str, str]:
    """File of each bundle's estimates."""
    return {n: "estimates.parquet" if len(bundles) == 1 else f"estimates-{n}.parquet" for n in bundles}


def _replay(bundles: dict[str, Bundle], settings: ReplayConfig, folder: Path) -> dict[str, Replayed]:
    """One bundle after the other, so that one's features are in memory at a time; all tables or none."""
    replays = {}
    with ExitStack() as whole:
        for name, table in _tables(bundles).items():
            beside = whole.enter_context(whole_file(folder / table))
            batches = iter_rows(settings.drive, bundles[name].strip, depth_kind=settings.depth_kind)
            replays[name] = replay_bundle(bundles[name], batches, beside)
    return replays


def _changed(bundles: dict[str, Bundle], plan: FloorPlan | None) -> list[str]:
    """A plan that is not the bundle's is a fair thing to draw on, and worth a word."""
    if plan is None:
        return []
    return [
        f"the plan {plan.name} is not the one that {name} was exported for, which is what its robots go by"
        for name, bundle in bundles.items()
        if bundle.manifest["provenance"]["plan_sha256"] != plan.content_hash()
    ]


def _colourless(replays: dict[str, Replayed]) -> list[str]:
    return [
        f"the drive has no colour, which {name} would weigh: depth alone was used"
        for name, replayed in replays.items()
        if replayed.depth_only
    ]

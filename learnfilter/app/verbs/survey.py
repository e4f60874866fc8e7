"""Know before any training where on your site the robot cannot tell itself apart, and what would help.

At sampled poses the strip that your plan predicts is compared with every place on it. You get the places that
look alike, in groups: how many twins a pose has, how far to go until they differ, or that no move helps; and
which metres of wall to paint so that they do. The run's folder gets report.html and summary.json.

Example:
  learnfilter survey site.file=toy_worlds/square_room.geojson markers=1
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from learnfilter.app.build import build_plan, build_strip
from learnfilter.app.pages import DEPTH_ONLY, provenance, settings_text
from learnfilter.app.progress import progress
from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import SurveyConfig
from learnfilter.core.seeds import stream
from learnfilter.core.strip import lay_on_ring
from learnfilter.render import Site, grid_for, render_site
from learnfilter.report import Column, Note, Placement, RunPage, SiteMap, Table, write_page
from learnfilter.survey import Group, Marker, RingComparison, Survey, advise, contrasting, paint, survey_site
from learnfilter.survey.lookalike import MOST_ALIKE


def run(settings: SurveyConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    plan, strip, grid = build_plan(settings.site), build_strip(settings.strip), settings.grid
    layout = lay_on_ring(strip, grid.headings, grid.bearings_per_heading)
    site = render_site(
        plan, layout, grid_for(plan, grid.headings, grid.cell_m), robot_radius_m=grid.robot_radius_m,
        max_range_m=strip.max_range_m, windows=grid.windows,
    )  # fmt: skip
    folder = open_run("survey", settings.name or Path(settings.site.file or "").stem, settings, replace=True)
    found = _survey(site, settings, "survey")
    nats = RingComparison().nats_a_column(site)
    markers = advise(found, site, plan, settings.markers, nats) if strip.has_colour else ()
    name, srgb = contrasting(site)
    after = _survey(paint(site, markers, srgb), settings, "survey, painted") if markers else None
    headline = _headline(found)
    notes = [*map(_group_note, found.groups), *(_marker_note(marker, name) for marker in markers)]
    lattice = site.grid
    floor_m2 = site.n_cells * lattice.cell_m**2
    write_page(
        RunPage(
            title=plan.name,
            verb="survey",
            headline=headline,
            confidence="A strip free of noise against every place on the plan; what it lacks is not in it.",
            job="Find the places that look alike to the sensor before anything is trained.",
            maps=(
                SiteMap(
                    f"Where {plan.name} is ambiguous", plan, tuple(notes), found.ambiguity,
                    Placement(lattice.left_m, lattice.bottom_m, lattice.cell_m),
                    "mass left elsewhere after one strip",
                    f"{len(found.looks.cell)} poses sampled on the {floor_m2:.0f} m2 that the robot gets to.",
                ),
            ),
            tables=(_table(found, after, name),),
            cautions=() if plan.has_finishes else (DEPTH_ONLY,),
            provenance=provenance(settings, {"site": site.key}),
            settings=settings_text(settings),
        ),
        folder.path / "report.html",
    )  # fmt: skip
    print(headline)
    for note in notes:
        print(f"- {note.message} {note.advice}".rstrip())
    print(f"written: {folder.path} (report.html)")
    return folder.finish(
        {
            "located_share": found.located_share,
            "alike_share": found.alike_share,
            "groups": [_group_facts(group) for group in found.groups],
            "markers": [{"segment": list(m.segment), "feature": m.feature} for m in markers],
            "marker_finish": name if markers else None,
            "located_share_painted": after.located_share if after else None,
        }
    )


def _survey(site: Site, settings: SurveyConfig, label: str) -> Survey:
    """Survey one site by the built-in comparison; the same poses are sampled before and after painting."""
    with progress(label) as tick:
        return survey_site(
            site, RingComparison().of(site), budget=settings.budget, margin_nats=settings.margin_nats,
            rng=stream(settings.seed, "survey"), tick=tick,
        )  # fmt: skip


def _headline(found: Survey) -> str:
    if not found.groups:
        return "No two places on this site look alike to the sensor: one strip is enough almost anywhere."
    stuck = sum(group.for_ever for group in found.groups)
    tail = ""
    if stuck == len(found.groups):
        tail = ", and no move tells them apart"
    elif stuck:
        tail = f"; in {stuck} of {len(found.groups)} groups no move tells them apart"
    return f"{found.alike_share:.0%} of poses look like another place{tail}."


def _group_note(group: Group) -> Note:
    x, y, _ = group.pair[0]
    count = group.fold if group.fold <= MOST_ALIKE else f"More than {MOST_ALIKE}"
    where = f"{count} places look alike after one strip, over {group.area_m2:.0f} m2"
    if group.for_ever:
        twins = f"{where}; at least two of them stay alike whatever the move."
        return Note(twins, (x, y), "warning", "Only a mark on a wall helps.")
    move = "a turn on the spot" if group.move_m == 0 else f"a move of {group.move_m:.1f} m"
    return Note(f"{where}; {move} tells the hardest two apart.", (x, y))


def _marker_note(marker: Marker, paint_name: str) -> Note:
    x0, y0, x1, y1 = marker.segment
    message = f"Paint the wall from ({x0:.1f}, {y0:.1f}) to ({x1:.1f}, {y1:.1f}) {paint_name}."
    return Note(message, ((x0 + x1) / 2, (y0 + y1) / 2), "note", f"Feature {marker.feature} of the plan.")


def _table(found: Survey, after: Survey | None, paint_name: str) -> Table:
    rows = [("as it is", found.located_share, found.alike_share)]
    if after:
        rows.append((f"with the {paint_name} marks", after.located_share, after.alike_share))
    columns = (Column("site"), Column("mass at the true place after one strip", ".3f", "high"),
               Column("share of poses with a look-alike", ".3f", "low"))  # fmt: skip
    return Table("One strip, from an unknown start", columns, tuple(rows))


def _group_facts(group: Group) -> dict[str, Any]:
    return {
        "fold": group.fold,
        "area_m2": group.area_m2,
        "areas": len(group.areas),
        "located": group.located,
        "pair": group.pair.tolist(),
        "gap_nats": group.gap_nats,
        "move_m": None if math.isinf(group.move_m) else group.move_m,
    }

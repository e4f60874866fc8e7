"""The page's sections that are words and tables."""

from __future__ import annotations

import math
from collections.abc import Iterable

from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.report.drive_model import Story
from learnfilter.report.markup import Markup, join, tag
from learnfilter.report.model import Cell, Column, Interval, RunPage, Table
from learnfilter.report.svg import interval_text


def section(name: str, title: str, *children: Markup) -> Markup:
    """A titled section that the page's contents can point at; nothing when it has no content."""
    if not any(children):
        return Markup("")
    heading = tag("h2", title, id=f"{name}-title")
    return tag("section", heading, *children, id=name, aria_labelledby=f"{name}-title")


def headline(page: RunPage) -> Markup:
    """Verdict first, then how sure it is, then what was asked."""
    return tag(
        "header",
        tag("p", f"learnfilter {page.verb}", class_="verb"),
        tag("h1", page.title),
        tag("p", page.headline, class_="verdict"),
        tag("p", page.confidence, class_="confidence"),
        tag("p", tag("strong", "Asked: "), page.job, class_="job"),
    )


def table(content: Table) -> Markup:
    """A table in which the best cells of a column are said in words as well as set bold."""
    best = [_best_rows(content, k) for k in range(len(content.columns))]
    head = tag("tr", *(tag("th", c.label, scope="col") for c in content.columns))
    body = [
        tag("tr", *(_cell(cell, content.columns[k], k == 0, n in best[k]) for k, cell in enumerate(row)))
        for n, row in enumerate(content.rows)
    ]
    whole = tag("table", tag("caption", content.title), tag("thead", head), tag("tbody", *body))
    note = tag("p", content.note, class_="note") if content.note else ""
    return join(
        [tag("div", whole, class_="scroll", tabindex=0, role="region", aria_label=content.title), note]
    )


def story(content: Story) -> Markup:
    """Sentences as a list, in order."""
    items = (tag("li", sentence) for sentence in content.sentences)
    return tag("div", tag("h3", content.title), tag("ol", *items, class_="findings"), class_="story")


def _number(cell: Cell) -> float:
    if isinstance(cell, Interval):
        cell = cell.value
    return float(cell) if isinstance(cell, (int, float)) else math.nan


def _best_rows(content: Table, column: int) -> set[int]:
    """Rows that hold the column's best number; none where no row beats another."""
    if not content.columns[column].best:
        return set()
    values = {n: v for n, row in enumerate(content.rows) if not math.isnan(v := _number(row[column]))}
    if len(set(values.values())) < 2:
        return set()
    best = (max if content.columns[column].best == "high" else min)(values.values())
    return {n for n, value in values.items() if value == best}


def cell_text(cell: Cell, form: str) -> str:
    """A cell in the words of its column's format; a dash where nothing is known."""
    if isinstance(cell, str):
        return cell
    if isinstance(cell, Interval):
        return interval_text(cell, form)
    number = _number(cell)
    if math.isnan(number):
        return "\u2013"
    return str(cell) if isinstance(cell, int) else format(number, form)


def _cell(cell: Cell, column: Column, first: bool, best: bool) -> Markup:
    text = cell_text(cell, column.form)
    if first:
        return tag("th", text, scope="row")
    kind = "text" if isinstance(cell, str) else "number"
    if not best:
        return tag("td", text, class_=kind)
    return tag("td", text, tag("span", " best", class_="best"), class_=f"{kind} won")


def cautions(words: Iterable[str]) -> Markup:
    """The run's own cautions, and always the safety notice."""
    own, notice = (tag("li", w) for w in words), tag("li", SAFETY_NOTICE, class_="safety")
    return tag("ul", *own, notice, class_="cautions")


def provenance(page: RunPage) -> Markup:
    """What it takes to reproduce the run."""
    rows = [join([tag("dt", key), tag("dd", value)]) for key, value in page.provenance.items()]
    parts = [tag("dl", *rows)] if rows else []
    if page.settings:
        parts.append(tag("details", tag("summary", "Settings of this run"), tag("pre", page.settings)))
    return join(parts)

"""Tables mark the best in words, and the safety notice is never left out."""

import html

import pytest

from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.report.model import Column, Interval, Table
from learnfilter.report.sections import cautions, cell_text, section, table

NAN = float("nan")


def best_cells(best: str, *values) -> list[int]:
    """Numbers of the rows that a table with one column of values calls best."""
    made = table(Table("t", (Column("m"), Column("v", ".2f", best)), tuple((f"m{v}", v) for v in values)))
    rows = made.split("<tbody>")[1].split("</tr>")[:-1]
    return [n for n, row in enumerate(rows) if "best" in row]


@pytest.mark.parametrize(
    ("best", "values", "expected"),
    [
        ("high", (0.5, 0.9, 0.7), [1]),
        ("low", (0.5, 0.9, 0.7), [0]),
        ("high", (0.9, 0.9, 0.7), [0, 1]),
        ("low", (Interval(3.0, 1, 5), Interval(2.0, 1, 9)), [1]),
        ("low", (NAN, 2.0, 3.0), [1]),
        ("high", (None, 2.0), []),
        ("low", (2.0, 2.0), []),
        ("", (1.0, 2.0), []),
    ],
)
def test_the_best_of_a_column_is_marked_in_words(best, values, expected):
    """Ties share the mark; missing values do not compete; where none is worse, none wins."""
    assert best_cells(best, *values) == expected


@pytest.mark.parametrize(
    ("cell", "expected"),
    [("word", "word"), (12704, "12704"), (1.614, "1.61"), (None, "\u2013"), (NAN, "\u2013")],
)
def test_cells_are_written_in_their_column_format(cell, expected):
    """Whole numbers stay whole; what is unknown is a dash."""
    assert cell_text(cell, ".2f") == expected


@pytest.mark.parametrize("own", [(), ("depth only",)])
def test_the_safety_notice_is_always_among_the_cautions(own):
    """Design: a position estimate is not a safety function, said where it can hurt someone."""
    assert html.escape(SAFETY_NOTICE) in cautions(own)


@pytest.mark.parametrize(
    "claim",
    [
        "not a safety function",
        "no performance level",
        "separately assessed safety equipment",
        "risk assessment",
    ],
)
def test_the_notice_says_what_it_must(claim):
    """The four statements of the notice (reasons: ISO 12100, ISO 3691-4, ISO 13849-1)."""
    assert claim in SAFETY_NOTICE


def test_a_section_without_content_is_left_out():
    """No empty headings on a page."""
    assert section("a", "A") == ""

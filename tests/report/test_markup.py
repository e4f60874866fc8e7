"""Text is escaped on its way in; numbers survive JSON."""

import html
import json

import numpy as np
import pytest

from learnfilter.report.markup import Markup, data_script, escape, join, numbers, tag

NASTY = "</script><b a=\"1\" b='2'>&amp;"


def test_text_children_are_escaped_and_markup_is_not():
    """What was text reads back as that text; what was markup stays an element."""
    made = tag("p", NASTY, tag("b", "x"))
    assert made == f"<p>{html.escape(NASTY)}<b>x</b></p>"


def test_attribute_values_cannot_leave_their_quotes():
    """A quote in a value is written as an entity."""
    assert tag("i", title='" onclick="x') == '<i title="&quot; onclick=&quot;x"></i>'


def test_attribute_names_and_absent_values():
    """Underscores become hyphens, a trailing one goes; None and False are left out, True stands bare."""
    made = tag("input", class_="a", aria_label="b", hidden=True, step=None, checked=False)
    assert made == '<input class="a" aria-label="b" hidden>'


@pytest.mark.parametrize("value", [Markup("<i></i>"), escape("<"), join(["<", Markup("<b>")])])
def test_escaping_twice_changes_nothing(value):
    """Markup passes through every function of this module unchanged."""
    assert escape(value) == value


def test_embedded_json_holds_no_angle_bracket_and_reads_back():
    """Nothing in the data can close its element, and the data is what was given."""
    made = data_script({"name": NASTY}, "drive")
    body = made.removeprefix('<script type="application/json" class="drive">').removesuffix("</script>")
    assert "<" not in body and json.loads(body) == {"name": NASTY}


def test_numbers_that_are_not_finite_become_null():
    """JSON has no NaN; a missing range is null."""
    assert numbers(np.array([[1.23456, np.nan], [np.inf, -2]]), 2) == [[1.23, None], [None, -2.0]]

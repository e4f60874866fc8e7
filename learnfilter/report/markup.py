"""HTML and SVG text that cannot forget to escape: whatever is not Markup is escaped on the way in."""

from __future__ import annotations

import html
import json
from collections.abc import Iterable
from typing import Any

import numpy as np

VOID = frozenset({"br", "img", "input", "meta"})


class Markup(str):
    """Text that is HTML already."""


def escape(value: Any) -> Markup:
    """Markup as it is, anything else as escaped text."""
    return value if isinstance(value, Markup) else Markup(html.escape(str(value), quote=True))


def join(parts: Iterable[Any], between: str = "") -> Markup:
    """Escape each part and string them together."""
    return Markup(between.join(escape(part) for part in parts))


def tag(name: str, /, *children: Any, **attributes: Any) -> Markup:
    """One element.

    Args:
        name: of the element.
        children: put in order; escaped unless they are Markup.
        attributes: `stroke_width=2` becomes `stroke-width="2"`, `class_` becomes `class`; None and
            False are left out, True stands bare, floats are cut to five significant digits.
    """
    text = "".join(_attribute(key.rstrip("_").replace("_", "-"), value) for key, value in attributes.items())
    if name in VOID:
        return Markup(f"<{name}{text}>")
    return Markup(f"<{name}{text}>{join(children)}</{name}>")


def _attribute(key: str, value: Any) -> str:
    if value is None or value is False:
        return ""
    if value is True:
        return f" {key}"
    if isinstance(value, float):
        value = f"{value:.5g}"
    return f' {key}="{html.escape(str(value), quote=True)}"'


def data_script(value: Any, class_: str) -> Markup:
    """JSON for the page's own script; nothing in it can end the element or start another."""
    text = json.dumps(value, allow_nan=False, separators=(",", ":"))
    safe = text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")
    return tag("script", Markup(safe), type="application/json", class_=class_)


def numbers(array: Any, digits: int = 3) -> list:
    """Nested lists of rounded floats for JSON, None where a number is not finite."""
    array = np.asarray(array, dtype=float)
    if array.ndim > 1:
        return [numbers(part, digits) for part in array]
    return [round(float(value), digits) if np.isfinite(value) else None for value in array]

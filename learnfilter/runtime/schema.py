"""Hold a JSON value to a JSON Schema: the few keywords our own manifest uses (draft 2020-12).

A robot installs NumPy and safetensors alone; `manifest.schema.json` is the one place that says what a
manifest may hold, for people, for other languages and for this reader.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from learnfilter.core.errors import BundleError

_TYPES: Mapping[str, tuple[type, ...]] = {
    "null": (type(None),),
    "object": (dict,),
    "array": (list,),
    "string": (str,),
    "boolean": (bool,),
    "integer": (int,),
    "number": (int, float),
}


def hold(value: Any, schema: Mapping[str, Any], file: Path, place: str = "") -> None:
    """Check a value.

    Args:
        value: parsed JSON.
        schema: type (one or a list), enum, bounds, sizes, items, properties, required, additionalProperties.
        file: for messages.
        place: where in the file the value stands.

    Raises:
        BundleError: names the first place that breaks the schema.
    """

    def refuse_unless(good: bool, expected: str) -> None:
        if not good:
            got = type(value).__name__ if isinstance(value, dict | list) else value
            raise BundleError("breaks the schema", file=file, place=place or None, expected=expected, got=got)

    if "type" in schema:
        kinds = [schema["type"]] if isinstance(schema["type"], str) else schema["type"]
        refuse_unless(any(_is(value, kind) for kind in kinds), " or ".join(kinds))
    if "enum" in schema:
        refuse_unless(value in schema["enum"], " or ".join(map(str, schema["enum"])))
    if isinstance(value, int | float) and not isinstance(value, bool):
        refuse_unless(value >= schema.get("minimum", -math.inf), f"at least {schema.get('minimum')}")
        refuse_unless(value <= schema.get("maximum", math.inf), f"at most {schema.get('maximum')}")
        above = schema.get("exclusiveMinimum")
        refuse_unless(above is None or value > above, f"above {above}")
    if isinstance(value, list):
        least, most = schema.get("minItems", 0), schema.get("maxItems", math.inf)
        refuse_unless(least <= len(value) <= most, f"{least} to {most} items")
        for number, item in enumerate(value):
            hold(item, schema.get("items", {}), file, f"{place}[{number}]")
    if isinstance(value, dict):
        _hold_members(value, schema, file, place)


def _hold_members(value: dict[str, Any], schema: Mapping[str, Any], file: Path, place: str) -> None:
    def refuse(message: str, name: str, expected: str | None = None) -> None:
        raise BundleError(message, file=file, place=f"{place}.{name}".lstrip("."), expected=expected)

    for name in schema.get("required", ()):
        if name not in value:
            refuse("a member is missing", name)
    least, most = schema.get("minProperties", 0), schema.get("maxProperties", math.inf)
    if not least <= len(value) <= most:
        raise BundleError(
            "wrong number of members",
            file=file,
            place=place,
            expected=f"{least} to {most}",
            got=sorted(value),
        )
    known, others = schema.get("properties", {}), schema.get("additionalProperties", {})
    for name, member in value.items():
        if name not in known and others is False:
            refuse("unknown member", name, " or ".join(known))
        hold(member, known.get(name, others), file, f"{place}.{name}".lstrip("."))


def _is(value: Any, kind: str) -> bool:
    if isinstance(value, bool):
        return kind == "boolean"
    return isinstance(value, _TYPES[kind])

"""The manifest's schema, read by us and by a general library."""

import copy
import json
from pathlib import Path

import jsonschema
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from learnfilter.core.errors import BundleError
from learnfilter.runtime.bundle import MANIFEST, MANIFEST_SCHEMA
from learnfilter.runtime.schema import hold
from tests.shipping import KINDS

SCHEMA = json.loads(MANIFEST_SCHEMA.read_text(encoding="utf-8"))
VALUES = st.sampled_from([None, True, -1, 0, 3, 0.5, -2.5, "", "relu", [], [1.5], [-1], {}, {"beam": {}}])


def places(value, path=()):
    """The path of every member and item, at any depth."""
    yield path
    children = (
        value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    )
    for key, child in children:
        yield from places(child, (*path, key))


def test_the_schema_is_one():
    """Valid under the standard that it names."""
    jsonschema.Draft202012Validator.check_schema(SCHEMA)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_manifest_obeys_the_schema(shipped, kind):
    """By a library that knows nothing of us."""
    jsonschema.validate(json.loads((shipped(kind) / MANIFEST).read_text()), SCHEMA)


def test_a_bundle_that_watches_nothing_obeys_too(shipped):
    """Where there were no drives to measure what is usual."""
    manifest = json.loads((shipped("beam") / MANIFEST).read_text()) | {"watch": None}
    jsonschema.validate(manifest, SCHEMA)
    hold(manifest, SCHEMA, Path("manifest.json"))


@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_our_reader_refuses_what_the_library_refuses(shipped, data):
    """A member changed, dropped or added anywhere: both agree."""
    kind = data.draw(st.sampled_from(["matcher", "endpoint+colour"]))
    manifest = copy.deepcopy(json.loads((shipped(kind) / MANIFEST).read_text()))
    *way, last = data.draw(st.sampled_from([path for path in places(manifest) if path]))
    target = manifest
    for key in way:
        target = target[key]
    if data.draw(st.booleans()):
        target[last] = data.draw(VALUES)
    else:
        del target[last]
    expected = jsonschema.Draft202012Validator(SCHEMA).is_valid(manifest)
    try:
        hold(manifest, SCHEMA, Path("manifest.json"))
        found = True
    except BundleError:
        found = False
    assert found == expected


def test_the_place_of_a_fault_is_named():
    """The whole path to the member, what may stand there and what did."""
    with pytest.raises(BundleError, match=r"m\.json, a\[1\]\.b: .*expected at least 0, got -1"):
        item = {"properties": {"b": {"type": "integer", "minimum": 0}}}
        hold({"a": [{}, {"b": -1}]}, {"properties": {"a": {"items": item}}}, Path("m.json"))

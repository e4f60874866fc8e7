"""What happens to a bundle on its way: each fault is found, and its file and place are named."""

import json
from pathlib import Path

import numpy as np
import pytest
from safetensors.numpy import load_file, save

from learnfilter.core.errors import BundleError
from learnfilter.runtime import load_bundle
from learnfilter.runtime.bundle import MANIFEST, SITE, VECTORS, WEIGHTS, file_entry, seal

FILES = (MANIFEST, WEIGHTS, SITE, VECTORS)


def edit(folder: Path, change) -> None:
    """Change the manifest and seal it anew, as a mistaken writer would."""
    manifest = json.loads((folder / MANIFEST).read_text())
    change(manifest)
    (folder / MANIFEST).write_text(json.dumps(seal(manifest)))


def rewrite(folder: Path, name: str, change) -> None:
    """Change the arrays of a file and let the manifest say so."""
    arrays = load_file(folder / name)
    change(arrays)
    content = save(arrays)
    (folder / name).write_bytes(content)
    edit(folder, lambda manifest: manifest["files"].update({name: file_entry(content)}))


def fault(folder: Path) -> str:
    with pytest.raises(BundleError) as caught:
        load_bundle(folder)
    return str(caught.value)


def test_a_whole_bundle_says_what_was_shipped(bundle):
    """The untouched copy loads, so the tests below fail for their own reason."""
    loaded = load_bundle(bundle)
    assert loaded.strip.columns == 16 and loaded.weighing.floor == 1e-4


@pytest.mark.parametrize("name", FILES)
def test_a_missing_file_is_named(bundle, name):
    """A copy that stopped early."""
    (bundle / name).unlink()
    assert name in fault(bundle)


@pytest.mark.parametrize("name", FILES)
@pytest.mark.parametrize("share", [0.0, 0.5, 0.999])
def test_a_truncated_file_is_named(bundle, name, share):
    """Cut anywhere."""
    content = (bundle / name).read_bytes()
    (bundle / name).write_bytes(content[: int(share * len(content))])
    assert name in fault(bundle)


@pytest.mark.parametrize("name", FILES)
@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
def test_a_flipped_bit_is_named(bundle, name, share):
    """The lowest bit of one byte anywhere, of a digit in the manifest too."""
    content = bytearray((bundle / name).read_bytes())
    at = int(share * len(content))
    if name == MANIFEST:
        at = next(i for i in range(at, len(content)) if chr(content[i]).isdigit())
    content[at] ^= 1
    (bundle / name).write_bytes(content)
    assert name in fault(bundle)


def test_a_newer_schema_is_refused_by_name(bundle):
    """Before anything else is read, since all else may mean something new."""
    edit(bundle, lambda manifest: manifest.update(schema=3, unheard_of=True))
    assert "manifest.json, schema: the bundle is newer than this reader" in fault(bundle)
    assert "expected at most 2, got 3" in fault(bundle)


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"schema": NaN}', '{"schema": "1"}'])
def test_a_manifest_that_is_none_is_named(bundle, text):
    """Not JSON, not an object, or without a version."""
    (bundle / MANIFEST).write_text(text)
    assert MANIFEST in fault(bundle)


@pytest.mark.parametrize(
    ("name", "array"),
    [(WEIGHTS, "measured"), (WEIGHTS, "ring_mid.weight"), (SITE, "range_m"), (SITE, "field_m")],
)
def test_a_wrong_shape_is_named(bundle, name, array):
    """One row short, with digests that agree."""
    rewrite(bundle, name, lambda arrays: arrays.update({array: arrays[array][:-1].copy()}))
    assert f"{name}, {array}: wrong shape" in fault(bundle)


@pytest.mark.parametrize(("name", "array"), [(WEIGHTS, "root"), (SITE, "finish")])
def test_a_missing_array_is_named(bundle, name, array):
    """The writer forgot one."""
    rewrite(bundle, name, lambda arrays: arrays.pop(array))
    assert f"{name}, {array}: an array is missing" in fault(bundle)


@pytest.mark.parametrize("name", [WEIGHTS, SITE])
def test_an_array_nobody_asked_for_is_named(bundle, name):
    """Weights of another model than the manifest says."""
    rewrite(bundle, name, lambda arrays: arrays.update(stranger=np.zeros(3, np.float32)))
    assert f"{name}, stranger: unknown array" in fault(bundle)


@pytest.mark.parametrize(
    ("name", "array", "value"),
    [
        (WEIGHTS, "ring_in.bias", np.nan),
        (WEIGHTS, "expected", np.inf),
        (SITE, "range_m", np.nan),
        (SITE, "range_m", -1.0),
        (SITE, "finish", 99),
        (SITE, "cells", 10**6),
        (SITE, "palette", np.inf),
    ],
)
def test_a_value_that_cannot_be_is_named(bundle, name, array, value):
    """A training that diverged, an index that points nowhere."""
    rewrite(bundle, name, lambda arrays: arrays[array].reshape(-1).__setitem__(0, value))
    assert f"{name}, {array}" in fault(bundle)


def test_a_wrong_kind_of_number_is_named(bundle):
    """Whole numbers where the lattice needs them."""
    rewrite(bundle, SITE, lambda arrays: arrays.update(cells=arrays["cells"].astype(np.float32)))
    assert f"{SITE}, cells: wrong kind of number" in fault(bundle)


def test_half_precision_weights_load(bundle):
    """Smaller floats are widened on the way in."""
    rewrite(bundle, WEIGHTS, lambda arrays: arrays.update(root=arrays["root"].astype(np.float16)))
    assert load_bundle(bundle).model.root.dtype == np.float32


@pytest.mark.parametrize(
    ("place", "change"),
    [
        ("layout.bearings", lambda m: m["layout"].update(bearings=48)),
        ("layout.source", lambda m: m["strip"].update(bearings_rad=[0.0])),
        ("layout.source", lambda m: m["layout"].update(source=[0] * 65)),
        ("weighing.floor", lambda m: m["weighing"].update(floor=0)),
        (f"files.{SITE}", lambda m: m["files"].pop(SITE)),
        ("files./etc/passwd", lambda m: m["files"].update({"/etc/passwd": {"bytes": 0, "sha256": ""}})),
        ("model", lambda m: m["model"].clear()),
    ],
)
def test_a_manifest_that_contradicts_itself_is_named(bundle, place, change):
    """Well-formed members that do not fit each other."""
    edit(bundle, change)
    assert f"{MANIFEST}, {place}: " in fault(bundle)

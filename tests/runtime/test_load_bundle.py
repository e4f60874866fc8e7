"""What happens to a bundle on its way: each fault is found, and its file and place are named."""

import shutil
from pathlib import Path

import numpy as np
import pytest
from safetensors.numpy import load_file

from learnfilter.core.errors import BundleError
from learnfilter.runtime import load_bundle
from learnfilter.runtime.bundle import MANIFEST, SITE, VECTORS, WEIGHTS
from tests.shipping import edit, rewrite

FILES = (MANIFEST, WEIGHTS, SITE, VECTORS, "observe.onnx", "step.onnx")


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
    edit(bundle, lambda manifest: manifest.update(schema=4, unheard_of=True))
    assert "manifest.json, schema: the bundle is newer than this reader" in fault(bundle)
    assert "expected at most 3, got 4" in fault(bundle)


def test_an_older_schema_is_to_be_exported_again(bundle):
    """Its numbers are gone from this reader, but the weights are still where they were trained."""
    edit(bundle, lambda manifest: manifest.update(schema=2))
    assert "manifest.json, schema: made by an earlier version: export it again" in fault(bundle)


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"schema": NaN}', '{"schema": "1"}'])
def test_a_manifest_that_is_none_is_named(bundle, text):
    """Not JSON, not an object, or without a version."""
    (bundle / MANIFEST).write_text(text)
    assert MANIFEST in fault(bundle)


@pytest.mark.parametrize(
    ("name", "array"),
    [(WEIGHTS, "measured"), (WEIGHTS, "ring_mid.weight"), (SITE, "range_code"), (SITE, "unsure")],
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
        (SITE, "finish", 99),
        (SITE, "cells", 30_000),
        (SITE, "cells", -1),
        (SITE, "palette", -0.5),
        (SITE, "palette", np.inf),
    ],
)
def test_a_value_that_cannot_be_is_named(bundle, name, array, value):
    """A training that diverged, an index that points nowhere."""
    rewrite(bundle, name, lambda arrays: arrays[array].reshape(-1).__setitem__(0, value))
    assert f"{name}, {array}" in fault(bundle)


@pytest.mark.parametrize("order", [[1, 0], [0, 0]], ids=["swapped", "twice"])
def test_cells_out_of_order_are_named(bundle, order):
    """Belief is taken out of planes row by row, so cells must come in that order."""
    rewrite(bundle, SITE, lambda arrays: arrays["cells"].__setitem__(slice(2), arrays["cells"][order]))
    assert f"{SITE}, cells: out of range; expected cells of the grid, row by row, none twice" in fault(bundle)


@pytest.mark.parametrize(
    ("array", "kind", "message"),
    [
        ("cells", np.float32, "wrong kind of number"),
        ("range_code", np.int32, "out of range; expected uint8 or uint16"),
        ("unsure", np.int8, "out of range; expected uint8"),
        ("finish", np.int32, "out of range; expected uint8 or int16"),
    ],
)
def test_a_wrong_kind_of_number_is_named(bundle, array, kind, message):
    """Codes mean something in their own type alone."""
    rewrite(bundle, SITE, lambda arrays: arrays.update({array: arrays[array].astype(kind)}))
    assert f"{SITE}, {array}: {message}" in fault(bundle)


@pytest.fixture
def small(shipped, tmp_path) -> Path:
    """A copy of an int8 bundle."""
    return Path(shutil.copytree(shipped("matcher", "int8"), tmp_path / "small"))


@pytest.mark.parametrize("precision", ["fp16", "int8"])
def test_small_weights_are_widened(shipped, precision):
    """Models compute in float32 whatever is stored."""
    model = load_bundle(shipped("matcher", precision)).model
    assert model.root.dtype == model.measured.dtype == np.float32


def test_bytes_are_multiplied_by_their_scales(small):
    """Of a table by column, of a layer by output."""
    stored, model = load_file(small / WEIGHTS), load_bundle(small).model
    expected = np.array(
        [[code * scale for code, scale in zip(row, stored["measured.scale"][0], strict=True)]
         for row in stored["measured"].astype(np.float32)]
    )  # fmt: skip
    np.testing.assert_array_equal(model.measured, expected.astype(np.float32))
    assert stored["ring_in.weight"].dtype == np.int8 and stored["ring_in.weight.scale"].shape == (16, 1, 1)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda a: a.pop("measured.scale"), "measured.scale: an array is missing"),
        (lambda a: a.update({"measured.scale": np.ones(3, np.float32)}), "measured.scale: wrong shape"),
        (lambda a: a.update({"measured.scale": np.ones((1, 3), np.float32)}), "measured.scale: wrong shape"),
        (lambda a: a["measured.scale"].__setitem__((0, 0), np.nan), "measured.scale: not finite"),
        (lambda a: a.update({"range_bias.scale": np.ones(1, np.float32)}), "range_bias.scale: unknown array"),
    ],
)
def test_a_scale_that_does_not_fit_is_named(small, change, message):
    """One that is missing, of another shape, not a number, or beside floats."""
    rewrite(small, WEIGHTS, change)
    assert f"{WEIGHTS}, {message}" in fault(small)


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
        ("precision", lambda m: m.update(precision="int4")),
        ("watch.locked", lambda m: m["watch"]["locked"].update(nats=[1.0, 0.0], share=[0.1, 0.9])),
        ("watch.searching", lambda m: m["watch"]["searching"].update(nats=[1.0, 2.0], share=[0.9, 0.1])),
        ("watch.searching", lambda m: m["watch"]["searching"]["nats"].pop()),
    ],
)
def test_a_manifest_that_contradicts_itself_is_named(bundle, place, change):
    """Well-formed members that do not fit each other."""
    edit(bundle, change)
    assert f"{MANIFEST}, {place}: " in fault(bundle)

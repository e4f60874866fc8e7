"""Bundles are written whole or not at all, and again for another plan without training."""

import json
from dataclasses import replace

import numpy as np
import pytest
from safetensors.numpy import load_file

from learnfilter.core.errors import BundleError, ConfigError, InputError
from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.export import bundle as writer
from learnfilter.export import write_bundle
from learnfilter.export.bundle import DEPTH_ONLY
from learnfilter.export.onnx_files import OBSERVE, STEP
from learnfilter.export.robot import robot_model
from learnfilter.observe.contract import ObservationModel
from learnfilter.runtime.bundle import MANIFEST, SITE, VECTORS, WEIGHTS, Weighing
from tests.shipping import PROVENANCE, filter_of, rendered

FILES = {MANIFEST, WEIGHTS, SITE, VECTORS, OBSERVE, STEP}


def write(folder, kind="beam", family="offices", **more):
    return write_bundle(folder, filter_of(kind, family), rendered(family)[1], PROVENANCE, **more)


def contents(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_the_folder_holds_the_files_and_nothing_else(tmp_path):
    """No leftovers beside it either."""
    summary = write(tmp_path / "a")
    found = contents(tmp_path / "a")
    assert found.keys() == FILES and [path.name for path in tmp_path.iterdir()] == ["a"]
    assert summary["bytes"] == sum(map(len, found.values()))


@pytest.mark.parametrize("precision", ["fp32", "int8"])
def test_the_same_filter_gives_the_same_bytes(tmp_path, precision):
    """No clock, no order of a dictionary in any file."""
    for name in ("a", "b"):
        write(tmp_path / name, "matcher", precision=precision)
    assert contents(tmp_path / "a") == contents(tmp_path / "b")


@pytest.mark.parametrize("earlier", [False, True])
@pytest.mark.parametrize("after", [0, 2, 4])
def test_a_writer_that_dies_leaves_what_was_there(tmp_path, monkeypatch, earlier, after):
    """After any number of files: the earlier bundle whole, or nothing."""
    if earlier:
        write(tmp_path / "a")
    before = contents(tmp_path / "a") if earlier else None
    plain_write, written = writer._write, []

    def dies(path, content):
        if len(written) == after:
            raise KeyboardInterrupt
        written.append(path)
        plain_write(path, content)

    monkeypatch.setattr(writer, "_write", dies)
    monkeypatch.setattr(writer, "load_bundle", lambda folder: dies(folder / "read back", b""))
    with pytest.raises(KeyboardInterrupt):
        write(tmp_path / "a", "beam+colour")
    assert [path.name for path in tmp_path.iterdir()] == (["a"] if earlier else [])
    assert not earlier or contents(tmp_path / "a") == before


def test_an_earlier_bundle_is_replaced(tmp_path):
    """By the new one, whole."""
    write(tmp_path / "a", "beam")
    write(tmp_path / "a", "beam+colour")
    model = json.loads((tmp_path / "a" / MANIFEST).read_text())["model"]
    assert model["blend"]["parts"].keys() == {"beam", "colour"}


@pytest.mark.parametrize("names", [["thesis.txt"], [MANIFEST, "thesis.txt"], [WEIGHTS]])
def test_a_folder_that_is_no_bundle_is_left_alone(tmp_path, names):
    """Whatever it holds may be all there is."""
    for name in names:
        (tmp_path / name).write_text("mine")
    with pytest.raises(ConfigError, match="not a bundle"):
        write(tmp_path)
    assert contents(tmp_path) == dict.fromkeys(names, b"mine")


def test_a_changed_plan_takes_the_same_weights(tmp_path):
    """Another site, rendered anew, and no training."""
    write(tmp_path / "a", "matcher")
    write(tmp_path / "b", "matcher", "hall")
    old, new = contents(tmp_path / "a"), contents(tmp_path / "b")
    assert old[WEIGHTS] == new[WEIGHTS] and old[SITE] != new[SITE]


def test_figures_and_cautions_travel_along(tmp_path):
    """With the verdict, and the safety notice before all."""
    verdict = {"ship": "learned", "sentence": "Ship it.", "confidence": "sure"}
    figures, cautions = {"located_4": 0.9}, ["mind the glass"]
    write(tmp_path / "a", "beam+colour", figures=figures, cautions=cautions, verdict=verdict)
    manifest = json.loads((tmp_path / "a" / MANIFEST).read_text())
    assert manifest["figures"] == figures and manifest["verdict"] == verdict
    assert manifest["cautions"] == [SAFETY_NOTICE, "mind the glass"]


def test_depth_only_is_said(tmp_path):
    """Where the plan names no finishes."""
    plain = filter_of("beam+colour")
    site = replace(plain.site, finish=np.full_like(plain.site.finish, -1))
    write_bundle(tmp_path / "a", plain._replace(site=site), rendered()[1], PROVENANCE)
    assert DEPTH_ONLY in json.loads((tmp_path / "a" / MANIFEST).read_text())["cautions"]


def test_a_setting_the_format_forbids_leaves_nothing(tmp_path):
    """A floor of zero would let a strip be impossible on the robot."""
    bad = filter_of("beam")._replace(weighing=Weighing(0.4, 0.4, 0.0))
    with pytest.raises(BundleError, match=r"weighing\.floor"):
        write_bundle(tmp_path / "a", bad, rendered()[1], PROVENANCE)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(("kind", "expected"), [("beam", False), ("endpoint+colour", True)])
def test_distances_go_along_only_where_the_model_reads_them(tmp_path, kind, expected):
    """A field is two bytes for every quarter of a cell, live or not."""
    write(tmp_path / "a", kind)
    assert ("field_code" in load_file(tmp_path / "a" / SITE)) == expected


def test_a_model_the_robot_cannot_run_is_refused():
    """Named, with what it can."""
    with pytest.raises(InputError, match="matcher, got ObservationModel"):
        robot_model(ObservationModel())

"""The runtime against the filter it was exported from, and whether the comparison can fail."""

import json
import shutil
from dataclasses import replace

import numpy as np
import pytest

from learnfilter.export import against_torch, compare, write_bundle
from learnfilter.export.check import total_variation
from learnfilter.observe.describe import describe, rebuild
from learnfilter.runtime.bundle import MANIFEST, seal
from tests.shipping import KINDS, LAYOUT, PROVENANCE, filter_of, rehearsed

SAME = 1e-4  # what the project promises (issue 2, runtime_tv)


@pytest.mark.parametrize("kind", KINDS)
def test_the_runtime_believes_what_torch_believes(shipped, kind):
    """After every weighed strip of a drive, over all poses."""
    apart = against_torch(shipped(kind), filter_of(kind), rehearsed()[1], 60)
    assert len(apart) == 60 and apart.max() < SAME


@pytest.mark.parametrize("kind", KINDS)
def test_the_runtime_reproduces_the_vectors(shipped, kind):
    """Missing columns and a strip without any reading included."""
    assert compare(shipped(kind)) < SAME


@pytest.mark.parametrize("kind", ["beam+colour", "endpoint+colour", "matcher"])
def test_a_filter_that_uses_every_second_column_is_reproduced(tmp_path, kind):
    """The same model and rings, half of the strip silent; and the silence shows against the whole strip."""
    site, drive = rehearsed()
    layout, whole = LAYOUT.every(2), filter_of(kind)
    half = whole._replace(model=rebuild(layout, *describe(whole.model)), site=replace(site, layout=layout))
    write_bundle(tmp_path / "half", half, drive, PROVENANCE)
    assert compare(tmp_path / "half") < SAME
    assert against_torch(tmp_path / "half", half, drive, 20).max() < SAME
    assert against_torch(tmp_path / "half", whole, drive, 20).max() > 100 * SAME


def altered(shipped, tmp_path, change):
    """A bundle whose manifest was changed and sealed anew."""
    folder = shutil.copytree(shipped("beam"), tmp_path / "altered")
    manifest = json.loads((folder / MANIFEST).read_text())
    change(manifest)
    (folder / MANIFEST).write_text(json.dumps(seal(manifest)))
    return folder


def test_another_motion_model_shows(shipped, tmp_path):
    """Twice the noise of travel is no rounding error."""
    folder = altered(shipped, tmp_path, lambda m: m["noise"].update(travel_from_travel=0.1))
    assert compare(folder) > 100 * SAME
    assert against_torch(folder, filter_of("beam"), rehearsed()[1], 20).max() > 100 * SAME


def test_other_strips_weighed_show(shipped, tmp_path):
    """A threshold that differs is a difference without bound."""
    assert compare(altered(shipped, tmp_path, lambda m: m["weighing"].update(after_m=2.0))) == np.inf


def test_total_variation_is_the_mass_that_differs():
    """Moving 0.3 of the mass is 0.3."""
    assert total_variation(np.array([0.5, 0.5, 0.0]), np.array([0.2, 0.5, 0.3])) == pytest.approx(0.3)

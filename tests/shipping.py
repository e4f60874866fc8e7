"""A small site with a drive, and filters of every kind to ship, for the tests of export and runtime."""

import json
from collections.abc import Callable
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import torch
from safetensors.numpy import load_file, save

from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.export import Filter, Provenance, write_bundle
from learnfilter.export.rings import as_shipped
from learnfilter.filtering.motion import MotionModel
from learnfilter.observe.beam import BeamModel
from learnfilter.observe.blend import Blend
from learnfilter.observe.colour import ColourFit, ColourModel, log_colour
from learnfilter.observe.endpoint import EndpointFit, EndpointModel
from learnfilter.observe.factors import factor_colour, factor_range
from learnfilter.observe.fitting import MixtureFit
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.observe.mixture import RangeMixture
from learnfilter.render import grid_for, render_site
from learnfilter.render.site import Site
from learnfilter.runtime.bundle import MANIFEST, Weighing, file_entry, seal
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.rehearse import rehearse_site

KINDS = ("beam", "beam+colour", "endpoint+colour", "matcher", "matcher without residual")
HEADINGS, REACH_M = 16, 6.0
# columns run clockwise from 80 degrees, one is blind, the sensor sits off the base and askew
STRIP = Strip(even_strip(80.0, -11.25, 16), 0.15, REACH_M, blind=(3,), mount=(0.15, -0.05, 0.3))
LAYOUT = lay_on_ring(STRIP, HEADINGS, 4)  # fine enough for two looks a bin
WEIGHING = Weighing(0.4, 0.4, 1e-4)  # twice what a simulated robot moves between strips
PROVENANCE = Provenance("plan", "config", [0], {})


@cache
def rendered(family: str = "offices") -> tuple[Site, tuple[Drive, ...]]:
    """An invented site of 8 x 8 m and two drives on it."""
    plan, drives, _ = rehearse_site(5, family, Conditions(), STRIP, 130, 2, 8.0, 8.0, without_finishes=0.0)
    grid = grid_for(plan, HEADINGS, 0.25)
    return render_site(plan, LAYOUT, grid, robot_radius_m=0.25, max_range_m=REACH_M), drives


@cache
def usual_drives() -> tuple[Drive, ...]:
    """Enough drives on it to calibrate a watch by."""
    return rehearse_site(5, "offices", Conditions(), STRIP, 40, 20, 8.0, 8.0, without_finishes=0.0).drives


@cache
def rehearsed(family: str = "offices") -> tuple[Site, Drive]:
    """That site as its bundles hold it, and the first drive."""
    site, drives = rendered(family)
    return as_shipped(site, True, "fp32"), drives[0]


@cache
def model_of(kind: str) -> Blend | Matcher:
    """A model of every kind, with parameters of a plausible fit; a matcher's network says something."""
    fine, coarse = RangeScale(0.05, 0.02, REACH_M), RangeScale(0.15, 0.06, REACH_M)
    background = np.random.default_rng(0).normal(-1.5, 0.6, (200, 3))
    colour = ColourFit(0.35, 3.0, 0.5, -1.5, background)
    parts = {
        "beam": BeamModel(LAYOUT, fine, MixtureFit(RangeMixture(), np.ones(fine.nodes + 1), ())),
        "endpoint": EndpointModel(LAYOUT, REACH_M, EndpointFit()),
        "colour": ColourModel(LAYOUT, colour),
    }
    if not kind.startswith("matcher"):
        chosen = {name: parts[name] for name in kind.split("+")}
        return Blend(chosen, dict.fromkeys(chosen, 0.3))
    finishes = log_colour(rendered()[0].palette)
    ranges = factor_range(coarse, MixtureFit(RangeMixture(), np.ones(coarse.nodes + 1), ()), 12)
    colours = factor_colour(colour, finishes, 6)
    birth = Birth(coarse, ranges, colours, 3.0, 0.35, 0.5, -1.5, 0.3, 0.3)
    generator = torch.Generator().manual_seed(0)
    model = Matcher(LAYOUT, birth, MatcherShape(residual=kind == "matcher"), generator)
    with torch.no_grad():
        for name, parameter in model.named_parameters():
            if name.endswith("_out.weight") or name.endswith(".bias"):
                parameter.normal_(0.0, 0.1, generator=generator)
    return model


def filter_of(kind: str, family: str = "offices") -> Filter:
    """A filter to ship."""
    return Filter(model_of(kind), MotionModel(), rendered(family)[0], STRIP, WEIGHING)


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


_WRITTEN: dict[tuple[str, str], Path] = {}


@pytest.fixture(scope="session")
def shipped(tmp_path_factory) -> Callable[..., Path]:
    """Folder of the bundle of a kind at a precision, written once; not to be changed."""

    def folder(kind: str, precision: str = "fp32") -> Path:
        which = kind, precision
        if which not in _WRITTEN:
            _WRITTEN[which] = tmp_path_factory.mktemp("shipped") / "bundle"
            write_bundle(
                _WRITTEN[which],
                filter_of(kind),
                rendered()[1],
                PROVENANCE,
                precision=precision,
                usual=usual_drives(),
            )
        return _WRITTEN[which]

    return folder

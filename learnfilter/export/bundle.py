"""Write bundles: whole or not at all."""

from __future__ import annotations

import json
import os
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any, NamedTuple

from numpy.typing import NDArray
from safetensors.numpy import save

from learnfilter import __version__
from learnfilter.core.errors import ConfigError
from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.drives.drive import Drive
from learnfilter.export.calibrate import calibrate
from learnfilter.export.mover import ShippedMover
from learnfilter.export.onnx_files import OBSERVE, STEP, write_onnx
from learnfilter.export.precision import input_moments, restored, stored
from learnfilter.export.reference import Filter
from learnfilter.export.rings import as_shipped, packed
from learnfilter.export.robot import robot_model, with_arrays
from learnfilter.export.vectors import make_vectors, to_bytes
from learnfilter.runtime.bundle import (
    MANIFEST,
    SCHEMA,
    SITE,
    VECTORS,
    WEIGHTS,
    assemble,
    file_entry,
    load_bundle,
    seal,
)
from learnfilter.runtime.site import reads_field

FILES = frozenset((MANIFEST, WEIGHTS, SITE, VECTORS, OBSERVE, STEP))
DEPTH_ONLY = "The plan names no finishes or the sensor has no colour: this bundle goes by depth only."


@dataclass(frozen=True)
class Provenance:
    """How the weights came to be.

    Attributes:
        plan_sha256: `FloorPlan.content_hash()` of the plan the site was rendered from.
        config_sha256: digest of the settings it was trained with.
        seeds: of the training.
        training: summary of its stages; empty for an analytic model.
        data: how many `sites` and `drives` it was trained on, and their `source`: families of invented
            sites, or recorded drives; as far as known.
    """

    plan_sha256: str
    config_sha256: str
    seeds: Sequence[int]
    training: Mapping[str, Any]
    data: Mapping[str, Any] = field(default_factory=dict)


def write_bundle(
    folder: str | Path,
    filter_: Filter,
    drives: Sequence[Drive],
    provenance: Provenance,
    figures: Mapping[str, Any] | None = None,
    cautions: Sequence[str] = (),
    *,
    precision: str = "fp32",
    verdict: Mapping[str, str] | None = None,
    usual: Sequence[Drive] = (),
    mover: ShippedMover | None = None,
) -> dict[str, Any]:
    """Write a bundle for one site.  A changed plan asks for another site and drives, not for training.

    Args:
        folder: where; an earlier bundle there is replaced, anything else is left alone.
        filter_: what to ship.
        drives: two on that site, recorded or simulated, for the test vectors; no reference poses needed.
        provenance: of the weights.
        figures: of an ablation.
        cautions: beyond the safety notice.
        precision: of the weights and rings, one of `runtime.bundle.PRECISIONS`; int8 is calibrated on the
            site and the first drive.
        verdict: of the ablation: `ship`, `sentence`, `confidence`.
        usual: drives on that site where the plan is true, to calibrate the watch by; none for no watch.
        mover: that chooses where to go next, if any.

    Returns:
        `folder`, `bytes` in all, `weights_bytes`, `weights` (how many numbers), `cells`, `poses`.

    Raises:
        ConfigError: the folder holds something that is not a bundle.
        DriveError: the drives are too short for the vectors, or too few to calibrate by.
        BundleError: what was written cannot be read back (a setting out of the format's range).
    """
    folder = Path(folder)
    refuse_to_replace(folder)
    rounded = _rounded(filter_, drives[0], precision)
    facts = {
        **_facts(filter_),
        "schema": SCHEMA,
        "precision": precision,
        "model": rounded.model,
        "site": rounded.site,
        "provenance": {"version": __version__, **asdict(provenance), "seeds": list(provenance.seeds)},
        "figures": dict(figures or {}),
        "verdict": None if verdict is None else dict(verdict),
        "cautions": [SAFETY_NOTICE, *_depth_only(filter_), *cautions],
        "watch": None,
        "mover": None if mover is None else mover.facts(),
    }
    contents = _contents(facts, rounded, {} if mover is None else mover.arrays(), drives, usual)
    with _whole_folder(folder) as beside:
        for name, content in contents.items():
            _write(beside / name, content)
        load_bundle(beside)
    return {
        "folder": str(folder),
        "bytes": sum(map(len, contents.values())),
        "weights_bytes": len(contents[WEIGHTS]),
        "weights": sum(array.size for array in restored(rounded.weights).values()),
        "cells": filter_.site.n_cells,
        "poses": filter_.site.n_cells * filter_.site.grid.headings,
    }


def _contents(
    facts: Mapping[str, Any],
    rounded: _Rounded,
    moving: Mapping[str, NDArray[Any]],
    drives: Sequence[Drive],
    usual: Sequence[Drive],
) -> dict[str, bytes]:
    """Every file of a bundle; the watch is calibrated and the vectors are made on the way."""
    contents = {WEIGHTS: save({**rounded.weights, **moving}), SITE: save(rounded.rings)}
    bundle = assemble(Path(), facts, contents[WEIGHTS], contents[SITE])
    if usual:
        facts = {**facts, "watch": calibrate(bundle, usual)}
        bundle = assemble(Path(), facts, contents[WEIGHTS], contents[SITE])
    # vectors are what a port must reproduce, so they come from the numbers it gets
    contents[VECTORS] = to_bytes(make_vectors(rounded.filter, drives, bundle.watch))
    so_far = {name: file_entry(content) for name, content in contents.items()}
    contents |= write_onnx(replace(bundle, manifest={**facts, "files": so_far}))
    files = {name: file_entry(content) for name, content in contents.items()}
    manifest = json.dumps(seal({**facts, "files": files}), indent=2, sort_keys=True) + "\n"
    return {**contents, MANIFEST: manifest.encode()}


class _Rounded(NamedTuple):
    """A filter at a precision: facts of model and site with their arrays, and the filter of those numbers."""

    model: dict[str, Any]
    weights: dict[str, NDArray[Any]]
    site: dict[str, Any]
    rings: dict[str, NDArray[Any]]
    filter: Filter


def _rounded(filter_: Filter, drive: Drive, precision: str) -> _Rounded:
    model, arrays = robot_model(filter_.model)
    with_field = reads_field(model)
    rings, facts = packed(filter_.site, with_field, precision)
    site = as_shipped(filter_.site, with_field, precision)
    moments = input_moments(filter_.model, site, drive) if precision == "int8" else {}
    weights = stored(arrays, precision, moments)
    shipped = filter_._replace(model=with_arrays(filter_.model, restored(weights)), site=site)
    return _Rounded(model, weights, facts, rings, shipped)


def refuse_to_replace(folder: Path) -> None:
    """Raise ConfigError where a folder holds anything but a bundle."""
    if not folder.exists():
        return
    held = set(os.listdir(folder)) if folder.is_dir() else {folder.name}
    if held and not (MANIFEST in held and held <= FILES):
        raise ConfigError(
            "not a bundle, so it is not replaced", file=folder, expected="a bundle or an empty folder",
            got=min(held - FILES, default="a part of one"),
        )  # fmt: skip


def _facts(filter_: Filter) -> dict[str, Any]:
    """Members of the manifest that say what the numbers mean."""
    strip, site = filter_.strip, filter_.site
    return {
        "strip": {
            "bearings_rad": list(strip.bearings_rad),
            "min_range_m": strip.min_range_m,
            "max_range_m": strip.max_range_m,
            "colour": strip.has_colour,
            "blind": list(strip.blind),
            "mount": dict(zip(("x_m", "y_m", "heading_rad"), strip.mount, strict=True)),
        },
        "grid": asdict(site.grid),
        "layout": {**asdict(site.layout), "source": list(site.layout.source)},
        "noise": asdict(filter_.noise),
        "weighing": asdict(filter_.weighing),
    }


def _depth_only(filter_: Filter) -> list[str]:
    return [] if filter_.strip.has_colour and (filter_.site.finish >= 0).any() else [DEPTH_ONLY]


@contextmanager
def _whole_folder(folder: Path) -> Iterator[Path]:
    """Yield a folder beside `folder` to fill; on success it takes the place of `folder`."""
    folder.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(prefix=f".{folder.name}.", dir=folder.parent) as scratch:
        new, old = Path(scratch) / "new", Path(scratch) / "old"
        new.mkdir()
        yield new
        if folder.exists():
            os.replace(folder, old)
        try:
            os.replace(new, folder)
        except OSError:
            if old.exists():
                os.replace(old, folder)
            raise


def _write(path: Path, content: bytes) -> None:
    with path.open("wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())

"""Write bundles: whole or not at all."""

from __future__ import annotations

import json
import os
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from safetensors.numpy import save

from learnfilter import __version__
from learnfilter.core.errors import ConfigError
from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.drives.drive import Drive
from learnfilter.export.reference import Filter
from learnfilter.export.robot import robot_model
from learnfilter.export.vectors import make_vectors, to_bytes
from learnfilter.runtime.bundle import MANIFEST, SCHEMA, SITE, VECTORS, WEIGHTS, file_entry, load_bundle, seal

FILES = frozenset((MANIFEST, WEIGHTS, SITE, VECTORS))
_RINGS = ("cells", "range_m", "unsure", "finish", "palette", "field_m")
DEPTH_ONLY = "The plan names no finishes or the sensor has no colour: this bundle goes by depth only."


@dataclass(frozen=True)
class Provenance:
    """How the weights came to be.

    Attributes:
        plan_sha256: `FloorPlan.content_hash()` of the plan the site was rendered from.
        config_sha256: digest of the settings it was trained with.
        seeds: of the training.
        training: summary of it; empty for an analytic model.
    """

    plan_sha256: str
    config_sha256: str
    seeds: Sequence[int]
    training: Mapping[str, Any]


def write_bundle(
    folder: str | Path,
    filter_: Filter,
    drive: Drive,
    provenance: Provenance,
    figures: Mapping[str, Any] | None = None,
    cautions: Sequence[str] = (),
) -> dict[str, Any]:
    """Write a bundle for one site.  A changed plan asks for another site and drive, not for training.

    Args:
        folder: where; an earlier bundle there is replaced, anything else is left alone.
        filter_: what to ship.
        drive: on that site, recorded or simulated, for the test vectors; no reference poses needed.
        provenance: of the weights.
        figures: of an ablation.
        cautions: beyond the safety notice.

    Returns:
        `folder`, `bytes` in all, `weights_bytes`, `weights` (how many numbers), `cells`, `poses`.

    Raises:
        ConfigError: the folder holds something that is not a bundle.
        DriveError: the drive is too short for the vectors.
        BundleError: what was written cannot be read back (a setting out of the format's range).
    """
    folder = Path(folder)
    refuse_to_replace(folder)
    facts, weights = robot_model(filter_.model)
    site = {name: np.ascontiguousarray(getattr(filter_.site, name)) for name in _RINGS}
    vectors = make_vectors(filter_, replace(drive, strip=filter_.strip))
    contents = {WEIGHTS: save(weights), SITE: save(site), VECTORS: to_bytes(vectors)}
    manifest = seal(
        {
            **_facts(filter_),
            "schema": SCHEMA,
            "model": facts,
            "provenance": {"version": __version__, **asdict(provenance), "seeds": list(provenance.seeds)},
            "figures": dict(figures or {}),
            "cautions": [SAFETY_NOTICE, *_depth_only(filter_), *cautions],
            "files": {name: file_entry(content) for name, content in contents.items()},
        }
    )
    contents[MANIFEST] = (json.dumps(manifest, indent=2, sort_keys=True) + "\n").encode()
    with _whole_folder(folder) as beside:
        for name, content in contents.items():
            _write(beside / name, content)
        load_bundle(beside)
    return {
        "folder": str(folder),
        "bytes": sum(map(len, contents.values())),
        "weights_bytes": len(contents[WEIGHTS]),
        "weights": sum(array.size for array in weights.values()),
        "cells": filter_.site.n_cells,
        "poses": filter_.site.n_cells * filter_.site.grid.headings,
    }


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
        "site": {"name": site.name, "key": site.key, "field_scale": site.field_scale},
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

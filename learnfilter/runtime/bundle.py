"""The bundle: what an engineer hands to the robot, read and checked.

A folder of `manifest.json` (described by `manifest.schema.json` beside this file), `weights.safetensors`,
`site.safetensors` and `vectors.npz`.  The manifest holds the digest of every other file and of itself,
so whatever was cut, flipped or mixed up on the way is found here and named.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NoReturn

from learnfilter.core.errors import BundleError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout, Strip
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.models import build_model
from learnfilter.runtime.motion import MotionNoise
from learnfilter.runtime.schema import hold
from learnfilter.runtime.site import RobotSite, read_site

SCHEMA = 2  # 2: a step weighs the mean over each cell and heading bin
MANIFEST, WEIGHTS, SITE, VECTORS = "manifest.json", "weights.safetensors", "site.safetensors", "vectors.npz"
MANIFEST_SCHEMA = Path(__file__).with_name("manifest.schema.json")


@dataclass(frozen=True)
class Weighing:
    """When a strip is weighed, and how much belief stays everywhere.

    Attributes:
        after_m, after_rad: travel or turn since the last weighed strip.
        floor: share of belief spread over all live poses before each weighing: the chance, a strip,
            that the robot was carried off; above zero, so that no strip is impossible.
    """

    after_m: float
    after_rad: float
    floor: float


@dataclass(frozen=True, eq=False)
class Bundle:
    """A checked bundle.

    Attributes:
        folder: where it lies.
        manifest: as read.
        strip: the sensor.
        noise: of odometry.
        weighing: when strips count.
        site: rings and distances.
        model: observation model with its weights.
    """

    folder: Path
    manifest: Mapping[str, Any]
    strip: Strip
    noise: MotionNoise
    weighing: Weighing
    site: RobotSite
    model: RobotModel


def load_bundle(folder: str | Path) -> Bundle:
    """Read and check a bundle.

    Raises:
        BundleError: a file is absent, damaged, newer than this reader or does not fit the others.
    """
    folder = Path(folder)
    manifest = _read_manifest(folder / MANIFEST)
    contents = {name: _read_file(folder / name, said) for name, said in manifest["files"].items()}
    grid, layout = PoseGrid(**manifest["grid"]), _layout(manifest["layout"])
    strip = _strip(manifest["strip"])
    _check_fit(folder / MANIFEST, strip, grid, layout)
    weights = Arrays.parse(folder / WEIGHTS, contents[WEIGHTS])
    model = build_model(layout, manifest["model"], weights)
    weights.none_left()
    return Bundle(
        folder,
        manifest,
        strip,
        MotionNoise(**manifest["noise"]),
        Weighing(**manifest["weighing"]),
        read_site(grid, layout, manifest["site"]["field_scale"], Arrays.parse(folder / SITE, contents[SITE])),
        model,
    )


def seal(manifest: Mapping[str, Any]) -> dict[str, Any]:
    """The manifest with its own digest: SHA-256 of all other members as compact, sorted JSON in ASCII."""
    rest = {name: value for name, value in manifest.items() if name != "sha256"}
    text = json.dumps(rest, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return {**rest, "sha256": hashlib.sha256(text.encode()).hexdigest()}


def file_entry(content: bytes) -> dict[str, Any]:
    """What the manifest says of a file."""
    return {"bytes": len(content), "sha256": hashlib.sha256(content).hexdigest()}


def _read_manifest(path: Path) -> dict[str, Any]:
    content = _bytes(path)
    try:
        manifest = json.loads(content, parse_constant=_no_constant)
    except ValueError as error:
        raise BundleError(f"unreadable JSON ({error})", file=path) from error
    schema = manifest.get("schema") if isinstance(manifest, dict) else None
    if not isinstance(schema, int) or schema > SCHEMA:
        raise BundleError(
            "the bundle is newer than this reader, or none", file=path, place="schema",
            expected=f"at most {SCHEMA}", got=schema,
        )  # fmt: skip
    hold(manifest, json.loads(MANIFEST_SCHEMA.read_text(encoding="utf-8")), path)
    if seal(manifest) != manifest:
        raise BundleError("damaged or edited", file=path, place="sha256", expected=seal(manifest)["sha256"])
    return manifest


def _no_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is no JSON")


def _bytes(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise BundleError(f"cannot be read ({error.strerror})", file=path) from error


def _read_file(path: Path, said: Mapping[str, Any]) -> bytes:
    content = _bytes(path)
    found = file_entry(content)
    for place, expected in said.items():
        if found[place] != expected:
            raise BundleError("damaged", file=path, place=place, expected=expected, got=found[place])
    return content


def _strip(said: Mapping[str, Any]) -> Strip:
    mount = said["mount"]
    return Strip(
        bearings_rad=tuple(said["bearings_rad"]),
        min_range_m=said["min_range_m"],
        max_range_m=said["max_range_m"],
        has_colour=said["colour"],
        blind=tuple(said["blind"]),
        mount=(mount["x_m"], mount["y_m"], mount["heading_rad"]),
    )


def _layout(said: Mapping[str, Any]) -> RingLayout:
    return RingLayout(**{**said, "source": tuple(said["source"])})


def _check_fit(file: Path, strip: Strip, grid: PoseGrid, layout: RingLayout) -> None:
    """Sizes that the schema cannot compare."""
    bearings = grid.headings * layout.bearings_per_heading
    for place, good, expected in (
        ("layout.bearings", layout.bearings == bearings, f"headings x bearings_per_heading = {bearings}"),
        ("layout.source", layout.columns <= layout.bearings, f"at most {layout.bearings} positions"),
        ("layout.source", max(layout.source) < strip.columns, f"columns below {strip.columns}"),
    ):
        if not good:
            raise BundleError("does not fit", file=file, place=place, expected=expected)

"""The bundle: what an engineer hands to the robot, read and checked.

A folder of `manifest.json` (described by `manifest.schema.json` beside this file), `weights.safetensors`,
`site.safetensors`, `vectors.npz`, `observe.onnx` and `step.onnx`.  The manifest holds the digest of every
other file and of itself, so whatever was cut, flipped or mixed up on the way is found here and named.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any, NoReturn

from learnfilter.core.errors import BundleError, ConfigError
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout, Strip
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.contract import RobotModel
from learnfilter.runtime.models import build_model
from learnfilter.runtime.motion import MotionNoise
from learnfilter.runtime.mover import RobotMover
from learnfilter.runtime.schema import hold
from learnfilter.runtime.site import RobotSite, read_site, reads_field
from learnfilter.runtime.watch import Watch

SCHEMA = 3  # 3: rings are packed, weights may be float16 or int8, cells of little belief are skipped
PRECISIONS = ("fp32", "fp16", "int8")
MANIFEST, WEIGHTS, SITE, VECTORS = "manifest.json", "weights.safetensors", "site.safetensors", "vectors.npz"
MANIFEST_SCHEMA = Path(__file__).with_name("manifest.schema.json")


@dataclass(frozen=True)
class Weighing:
    """When a strip is weighed, and how much belief stays everywhere.

    Attributes:
        after_m, after_rad: travel or turn since the last weighed strip.
        floor: share of belief spread over all live poses before each weighing: the chance, a strip,
            that the robot was carried off; above zero, so that no strip is impossible.
        skip_below: cells whose predicted belief, like that of their eight neighbours, is below this share,
            divided by the number of cells, are not weighed while the strip speaks for the others.
        skip_ratio: how many times the belief that is skipped the evidence of the others must be, else every
            cell is weighed.
        restart: share of belief spread over all live poses where the robot is found to be lost.
    """

    after_m: float
    after_rad: float
    floor: float
    skip_below: float = 1e-4
    skip_ratio: float = 1e7
    restart: float = 0.99


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
        watch: to begin with, from what is usual on drives where the plan is true; None where nothing was
            measured.
        mover: chooses where to go next; None where none was trained.
    """

    folder: Path
    manifest: Mapping[str, Any]
    strip: Strip
    noise: MotionNoise
    weighing: Weighing
    site: RobotSite
    model: RobotModel
    watch: Watch | None
    mover: RobotMover | None = None


def load_bundle(folder: str | Path) -> Bundle:
    """Read and check a bundle.

    Raises:
        BundleError: a file is absent, damaged, of another schema than this reader's or does not fit the
            others.
    """
    folder = Path(folder)
    manifest = _read_manifest(folder / MANIFEST)
    contents = {name: _read_file(folder / name, said) for name, said in manifest["files"].items()}
    return assemble(folder, manifest, contents[WEIGHTS], contents[SITE])


def assemble(folder: Path, manifest: Mapping[str, Any], weights: bytes, site: bytes) -> Bundle:
    """A bundle from a manifest that its schema allows and the contents of the files with arrays.

    Raises:
        BundleError: they do not fit each other.
    """
    grid, layout = PoseGrid(**manifest["grid"]), _layout(manifest["layout"])
    strip, watch = _strip(manifest["strip"]), manifest["watch"]
    _check_fit(folder / MANIFEST, strip, grid, layout)
    _check_watch(folder / MANIFEST, watch)
    arrays, rings = Arrays.parse(folder / WEIGHTS, weights), Arrays.parse(folder / SITE, site)
    model = build_model(layout, manifest["model"], arrays)
    mover = _mover(folder / MANIFEST, manifest["mover"], strip, arrays)
    arrays.none_left()
    return Bundle(
        folder,
        manifest,
        strip,
        MotionNoise(**manifest["noise"]),
        Weighing(**manifest["weighing"]),
        read_site(grid, layout, manifest["site"], reads_field(manifest["model"]), rings),
        model,
        None if watch is None else Watch.read(watch),
        mover,
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
    if schema < SCHEMA:
        raise BundleError(
            "made by an earlier version: export it again", file=path, place="schema",
            expected=str(SCHEMA), got=schema,
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


def _mover(file: Path, said: Mapping[str, Any] | None, strip: Strip, arrays: Arrays) -> RobotMover | None:
    if said is None:
        return None
    try:
        return RobotMover.read(said, strip.mount, arrays)
    except ConfigError as error:
        raise BundleError("does not fit", file=file, place="mover", got=error) from error


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


def _check_watch(file: Path, watch: Mapping[str, Any] | None) -> None:
    """Tables are looked up between their entries."""
    if watch is None:
        return
    for name in ("searching", "locked"):
        nats, share = watch[name]["nats"], watch[name]["share"]
        rising = all(later > earlier for column in (nats, share) for earlier, later in pairwise(column))
        if not rising or len(nats) != len(share):
            place, expected = f"watch.{name}", "as many nats as shares, both rising"
            raise BundleError("does not fit", file=file, place=place, expected=expected)

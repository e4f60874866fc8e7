"""Keep rendered sites on disk, one file a key; a file that is not whole is rendered anew."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from safetensors import SafetensorError, safe_open
from safetensors.numpy import save_file

from learnfilter.core.files import whole_file
from learnfilter.core.grid import PoseGrid
from learnfilter.core.strip import RingLayout
from learnfilter.plan.floorplan import FloorPlan
from learnfilter.render.rings import render_site, site_key
from learnfilter.render.site import Site

ARRAYS = ("cells", "live", "range_m", "unsure", "finish", "palette", "field_m")


def cached_site(
    folder: str | Path,
    plan: FloorPlan,
    layout: RingLayout,
    grid: PoseGrid,
    *,
    robot_radius_m: float,
    max_range_m: float,
    windows: str = "unsure",
    field_scale: int = 2,
) -> Site:
    """`render_site`, remembered in a folder.

    Args:
        folder: where sites are kept; made if absent, may be deleted at any time.
        plan, layout, grid, robot_radius_m, max_range_m, windows, field_scale: see `render_site`.

    Returns:
        The site, byte for byte what `render_site` gives.

    Raises:
        As `render_site`; never because of what the folder holds.
    """
    settings = (robot_radius_m, max_range_m, windows, field_scale)
    key = site_key(plan, layout, grid, *settings)
    path = Path(folder) / f"{key}.safetensors"
    arrays = _read(path)
    if arrays is not None:
        return Site(
            name=plan.name,
            grid=grid,
            layout=layout,
            max_range_m=max_range_m,
            field_scale=field_scale,
            key=key,
            **arrays,
        )
    site = render_site(
        plan,
        layout,
        grid,
        robot_radius_m=robot_radius_m,
        max_range_m=max_range_m,
        windows=windows,
        field_scale=field_scale,
    )
    # safetensors writes an array that is not contiguous in the wrong order, without a word
    _write(path, {name: np.ascontiguousarray(getattr(site, name)) for name in ARRAYS})
    return site


def _write(path: Path, arrays: Mapping[str, NDArray]) -> None:
    with whole_file(path) as beside:
        save_file(dict(arrays), beside, metadata={"digest": _digest(arrays)})


def _read(path: Path) -> dict[str, NDArray] | None:
    """The arrays of a file, or None where it is absent or damaged."""
    try:
        with safe_open(path, framework="numpy") as file:
            arrays = {name: file.get_tensor(name) for name in ARRAYS}
            said = (file.metadata() or {}).get("digest")
    except (OSError, SafetensorError):
        return None
    return arrays if said == _digest(arrays) else None


def _digest(arrays: Mapping[str, NDArray]) -> str:
    digest = hashlib.sha256()
    for name in ARRAYS:
        digest.update(f"{name} {arrays[name].dtype} {arrays[name].shape}".encode())
        digest.update(arrays[name].data)
    return digest.hexdigest()

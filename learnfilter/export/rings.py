"""A site's rings as small as a robot needs them; `runtime/site.py` says how they are stored, and reads."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from learnfilter.observe.endpoint import STEP_M
from learnfilter.render.site import Site
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.bundle import SITE
from learnfilter.runtime.site import UNKNOWN_FINISH, read_site


def packed(site: Site, reads_field: bool, precision: str) -> tuple[dict[str, NDArray[Any]], dict[str, Any]]:
    """The arrays of `site.safetensors` and the manifest's member `site`.

    Ranges are rounded to 0.2 mm at 8 m (6 cm where int8), distances to the steps that the end-point model
    reads, which costs it nothing.

    Args:
        site: as rendered.
        reads_field: whether the model reads distances; else they are left out.
        precision: one of `runtime.bundle.PRECISIONS`.
    """
    code_type = np.uint8 if precision == "int8" else np.uint16
    arrays = {
        "cells": site.cells.astype(np.int16 if max(site.live.shape) <= np.iinfo(np.int16).max else np.int32),
        "range_code": _range_code(site.range_m, site.max_range_m, np.iinfo(code_type).max).astype(code_type),
        "unsure": np.packbits(site.unsure, axis=-1),
        "finish": site.finish,
        "palette": site.palette,
    }
    if len(site.palette) <= UNKNOWN_FINISH:
        arrays["finish"] = np.where(site.finish < 0, UNKNOWN_FINISH, site.finish).astype(np.uint8)
    if reads_field:
        steps = np.rint(site.field_m / STEP_M)
        arrays["field_code"] = np.minimum(steps, np.iinfo(np.uint16).max).astype(np.uint16)
    facts = {
        "name": site.name,
        "key": site.key,
        "range_max_m": float(site.max_range_m),
        "field_step_m": STEP_M,
        "field_scale": site.field_scale,
    }
    return arrays, facts


def as_shipped(site: Site, reads_field: bool, precision: str) -> Site:
    """The site that a robot will read: rounded by packing.  Packing it again changes nothing."""
    arrays, facts = packed(site, reads_field, precision)
    robot = read_site(site.grid, site.layout, facts, reads_field, Arrays(Path(SITE), arrays))
    field_m = site.field_m if robot.field_m is None else robot.field_m
    return replace(site, range_m=robot.range_m, field_m=field_m)


def _range_code(range_m: NDArray[np.float32], range_max_m: float, top: int) -> NDArray[np.float32]:
    """Code of each range, see `runtime.site.range_table`."""
    share = np.sqrt(np.minimum(range_m / np.float32(range_max_m), 1.0))
    return np.where(np.isfinite(range_m), np.rint(share * np.float32(top - 1)), np.float32(top))

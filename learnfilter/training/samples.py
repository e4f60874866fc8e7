"""Stretches of courses, drawn for one iteration."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import torch
from torch import Tensor

from learnfilter.filtering.course import Course
from learnfilter.observe.contract import Strips


def stretch(
    courses: Sequence[Course], length: int, rng: np.random.Generator
) -> tuple[Tensor, Strips, Tensor, Tensor]:
    """A stretch of `length` steps from each course, at a random place in it.

    Returns:
        odometry [s b 3] (the first not applied), strips [s*b ...] step-major, cell [s b], heading [s b].
    """
    length = min(length, *(course.length for course in courses))
    begins = [int(rng.integers(0, course.length - length + 1)) for course in courses]
    pairs = [(course, slice(begin, begin + length)) for course, begin in zip(courses, begins, strict=True)]
    odometry = torch.stack([course.steps.odometry[part] for course, part in pairs], 1)
    depth = torch.stack([course.steps.strips.depth_m[part] for course, part in pairs], 1)
    rgb = torch.stack([course.steps.strips.rgb[part] for course, part in pairs], 1)
    cell = torch.stack([course.truth.cell[part] for course, part in pairs], 1)
    heading = torch.stack([course.truth.heading[part] for course, part in pairs], 1)
    strips = Strips(depth.flatten(0, 1), rgb.flatten(0, 1), courses[0].steps.strips.present)
    return odometry, strips, cell, heading

"""Score a filter on held-out courses while it is trained."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import torch

from learnfilter.drives.metrics import located
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionModel
from learnfilter.filtering.trace import trace
from learnfilter.observe.contract import ObservationModel
from learnfilter.training.loop import Validation


def validate(
    model: ObservationModel,
    motion: MotionModel,
    grounds: Sequence[Ground],
    scored: Sequence[Ground],
    floor: float,
    steps: int,
) -> Validation:
    """Mean nats of the true pose over the first `steps` strips of every course, from unknown starts.

    Args:
        model, motion, floor: the filter.
        grounds: sites the training has not seen.
        scored: the same on the lattice on which beliefs are scored.
        steps: strips of each course.

    Returns:
        The score, the located share after the last strip, and the first course's last belief.
    """
    nats, shares, picture = [], [], None
    for number, (ground, common) in enumerate(zip(grounds, scored, strict=True)):
        with torch.no_grad():
            features = model.read(ground.site)
        for course, judged in zip(ground.courses, common.courses, strict=True):
            wanted = number == 0 and picture is None
            result = trace(
                model, motion, ground.site, course, floor, steps, features, keep_marginals=wanted,
                scored=judged.scored_on(common.site),
            )  # fmt: skip
            nats.append(-result.log_truth.mean())
            last = len(result.estimate) - 1
            shares.append(float(located(result.estimate[last], course.poses[last])))
            if result.marginals is not None:
                picture = result.marginals[last]
    return Validation(float(np.mean(nats)), {"located": float(np.mean(shares))}, picture)

"""Where should the robot go next, so that it soon knows where it is?"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from learnfilter.core.errors import StepError
from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.moves import Motion, clear_motions
from learnfilter.runtime.policy import best

STILL = Motion(0.0, 0.0, 0.0)


def propose(localizer: Localizer, depth_m: ArrayLike, last: Motion = STILL) -> Motion:
    """The motion that the bundle's mover would make now, of those that the strip shows to be clear.

    Args:
        localizer: has taken in the strip.
        depth_m: [w] range along each raw column of it, NaN where nothing came back.
        last: the motion before this strip.

    Raises:
        StepError: the bundle has no mover, or nothing is known before the first strip.
    """
    mover, bearings = localizer.bundle.mover, np.array(localizer.bundle.strip.bearings_rad)
    if mover is None:
        raise StepError("this bundle has no mover", place="propose", expected="exported from a run with one")
    order = np.argsort(bearings)
    shown = np.asarray(depth_m, dtype=float)[order]
    clear = clear_motions(mover.motions, shown, bearings[order], mover.footprint)
    logits = mover.policy.logits(localizer.outlook(mover.motions), np.array(mover.motions), np.array(last))
    return mover.motions[best(logits, clear)]

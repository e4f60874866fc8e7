"""Run an exported filter with NumPy and safetensors alone.

from learnfilter.runtime import Localizer, load_bundle, propose

localizer = Localizer(load_bundle("bundle"))
estimate = localizer.step(odometry, depth_m, rgb)
motion = propose(localizer, depth_m)  # where the bundle has a mover
"""

from learnfilter.runtime.bundle import Bundle, load_bundle
from learnfilter.runtime.estimate import Estimate
from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.proposing import propose

__all__ = ["Bundle", "Estimate", "Localizer", "load_bundle", "propose"]

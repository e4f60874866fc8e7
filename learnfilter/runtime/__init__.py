"""Run an exported filter with NumPy and safetensors alone.

from learnfilter.runtime import Localizer, load_bundle

localizer = Localizer(load_bundle("bundle"))
estimate = localizer.step(odometry, depth_m, rgb)
"""

from learnfilter.runtime.bundle import Bundle, load_bundle
from learnfilter.runtime.estimate import Estimate
from learnfilter.runtime.localizer import Localizer

__all__ = ["Bundle", "Estimate", "Localizer", "load_bundle"]

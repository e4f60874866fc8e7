"""learnfilter trains compact learned observation models for a differentiable grid filter.

Nothing is imported here: `learnfilter.runtime` must load on a robot that has NumPy and
safetensors alone.
"""

__version__ = "0.3.0"

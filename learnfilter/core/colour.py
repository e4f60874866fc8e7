"""sRGB in files, linear light in arithmetic.

Source: IEC 61966-2-1:1999.  Its two branches do not meet exactly (a jump of 2e-9 at 0.04045), so a
round trip is good to about 1e-7 there and not better.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray


def srgb_to_linear(srgb: ArrayLike) -> NDArray[np.float64]:
    """Linear light of sRGB values, both in [0, 1], any shape."""
    srgb = np.asarray(srgb, dtype=np.float64)
    # the power is taken of what stays positive; the small values use the other branch
    curve = ((np.maximum(srgb, 0.04045) + 0.055) / 1.055) ** 2.4
    return np.where(srgb <= 0.04045, srgb / 12.92, curve)


def linear_to_srgb(linear: ArrayLike) -> NDArray[np.float64]:
    """sRGB values of linear light, both in [0, 1], any shape."""
    linear = np.asarray(linear, dtype=np.float64)
    curve = 1.055 * np.maximum(linear, 0.0031308) ** (1 / 2.4) - 0.055
    return np.where(linear <= 0.0031308, linear * 12.92, curve)

"""How bright surfaces look, in linear light.

A lamp beside the camera obeys the cosine and inverse-square laws (E = I cos(theta) / d^2, IES
definition 9.1.2); ceiling light is the rest, and varies slowly over the floor.  Shares and ranges
are judgements, no source.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from learnfilter.sim.conditions import Conditions

AMBIENT = 0.75
# Irradiance of the robot's lamp face-on at 1 m.  Much more and every near surface would saturate.
LAMP = 0.12
# Nearer than this the lamp lights no brighter: it is not a point.
LAMP_NEAR_M = 0.5
LEVEL_RANGE = (0.6, 1.4)
TINT = 0.08
UNEVEN = 0.15
UNEVEN_WAVE_M = (3.0, 10.0)

# XYZ to linear sRGB, IEC 61966-2-1:1999.
_TO_RGB = np.array([[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]])


@dataclass(frozen=True, eq=False)
class Light:
    """The light of one drive.

    Attributes:
        rgb: [3] linear factor on each channel.
        waves: [k 3] of the ceiling light over the floor: wave vector in rad/m along x and y, phase.
        uneven: amplitude of each wave, as a share.
    """

    rgb: NDArray[np.float64]
    waves: NDArray[np.float64]
    uneven: float = UNEVEN

    def ambient(self, x: ArrayLike, y: ArrayLike) -> NDArray[np.float64]:
        """Ceiling light at points in metres, mean AMBIENT."""
        phase = np.multiply.outer(x, self.waves[:, 0]) + np.multiply.outer(y, self.waves[:, 1])
        return AMBIENT * (1 + self.uneven * np.sin(phase + self.waves[:, 2]).mean(axis=-1))


def lamp(distance_m: ArrayLike, cosine: ArrayLike) -> NDArray[np.float64]:
    """Irradiance by the robot's lamp; cosine is that of the angle of incidence."""
    return LAMP * np.asarray(cosine) / np.maximum(distance_m, LAMP_NEAR_M) ** 2


def draw_light(conditions: Conditions, rng: np.random.Generator) -> Light:
    """The light of one drive: level uniform in its logarithm, a slight tint, slow waves."""
    level = np.exp(rng.uniform(*np.log(LEVEL_RANGE))) * conditions.light_level
    tint = 1 + rng.uniform(-TINT, TINT, 3)
    if conditions.light_kelvin is not None:
        tint = tint * black_body_rgb(conditions.light_kelvin)
    length, direction = rng.uniform(*UNEVEN_WAVE_M, 2), rng.uniform(-np.pi, np.pi, 2)
    number = 2 * np.pi / length
    waves = np.stack([number * np.cos(direction), number * np.sin(direction), rng.uniform(0, 2 * np.pi, 2)])
    return Light(level * tint, waves.T)


def black_body_rgb(kelvin: float) -> NDArray[np.float64]:
    """Linear sRGB [3], luminance 1, of a black body at 1667 to 25000 K; what sRGB cannot show is cut to 0.

    Source: cubic approximation of the Planckian locus, Kang et al. 2002, "Design of advanced color
    temperature control system for HDTV applications".
    """
    t = 1e3 / kelvin
    if kelvin <= 4000:
        x = np.polyval([-0.2661239, -0.2343589, 0.8776956, 0.179910], t)
    else:
        x = np.polyval([-3.0258469, 2.1070379, 0.2226347, 0.240390], t)
    if kelvin <= 2222:
        y = np.polyval([-1.1063814, -1.34811020, 2.18555832, -0.20219683], x)
    elif kelvin <= 4000:
        y = np.polyval([-0.9549476, -1.37418593, 2.09137015, -0.16748867], x)
    else:
        y = np.polyval([3.0817580, -5.87338670, 3.75112997, -0.37001483], x)
    return np.maximum(_TO_RGB @ np.array([x / y, 1.0, (1 - x - y) / y]), 0.0)

"""The laws of light."""

import colour
import numpy as np
import pytest
from scipy import stats

from learnfilter.sim.conditions import Conditions
from learnfilter.sim.light import Light, black_body_rgb, draw_light, lamp


@pytest.mark.parametrize(
    # E = I cos(theta) / d^2 with I = 100 cd, IES definition 9.1.2: 100, 25, 12.5 and 70.7107 lx
    ("angle_deg", "distance_m", "share"),
    [(0, 1, 1.0), (0, 2, 0.25), (60, 2, 0.125), (45, 1, 0.707107)],
)
def test_the_lamp_obeys_cosine_and_distance(angle_deg, distance_m, share):
    """Irradiance relative to face-on at 1 m."""
    ratio = lamp(distance_m, np.cos(np.radians(angle_deg))) / lamp(1.0, 1.0)
    np.testing.assert_allclose(ratio, share, atol=1e-6)


@pytest.mark.parametrize("kelvin", [2000, 2700, 4500, 6500])
def test_black_body_colour_is_that_of_the_planckian_locus(kelvin):
    """Against colour-science's implementation of the same approximation."""
    x, y = colour.temperature.CCT_to_xy_Kang2002(kelvin)
    rgb = colour.XYZ_to_sRGB(np.array([x / y, 1, (1 - x - y) / y]), apply_cctf_encoding=False)
    # the library adapts nothing for D65 but carries more digits of the matrix
    np.testing.assert_allclose(black_body_rgb(kelvin), np.maximum(rgb, 0), atol=2e-3)


def test_drives_differ_in_level_as_documented():
    """Over days the level is uniform in its logarithm from 0.6 to 1.4, tints of 8 % aside."""
    rgb = np.array([draw_light(Conditions(), np.random.default_rng(day)).rgb for day in range(400)])
    level = np.log(rgb.mean(axis=1))  # tints move it by 0.03, a thirtieth of its range
    assert stats.kstest(level, stats.uniform(np.log(0.6), np.log(1.4 / 0.6)).cdf).pvalue > 1e-3
    assert (rgb.max(axis=1) / rgb.min(axis=1)).max() <= 1.08 / 0.92 + 1e-12


def test_light_level_scales_every_channel():
    """Half the level, half the light."""
    full, half = (draw_light(Conditions(light_level=v), np.random.default_rng(1)) for v in (1.0, 0.5))
    np.testing.assert_allclose(half.rgb, full.rgb / 2)


def test_ceiling_light_varies_about_its_mean():
    """A sine wave over the floor: twice its mean is the sum of places half a wave apart."""
    light = Light(np.ones(3), np.array([[np.pi, 0.0, 0.3]]), uneven=0.2)
    here, there = light.ambient(np.array([0.4, 1.4]), np.zeros(2))
    np.testing.assert_allclose(here + there, 2 * 0.75)
    assert abs(here - there) > 0.01

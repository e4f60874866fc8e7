"""What may differ between the drive and the plan, as plain numbers."""

from __future__ import annotations

from dataclasses import dataclass

from learnfilter.core.errors import ConfigError


@dataclass(frozen=True)
class Conditions:
    """How the site, the light, the sensor and the robot differ from the plan; defaults are 'as trained'.

    Attributes:
        furniture_per_100_m2: things the plan does not show, mean number on 100 m2 of floor.
        people: walkers on the site.
        light_level: brightness, 1 as trained; every drive still varies by a factor of 0.6 to 1.4.
        light_kelvin: colour temperature of the light under a camera balanced for daylight; None for
            neutral light with a slight tint (8 % a channel).
        finishes: 'usual' or 'unseen': which colours invented surfaces take.
        layout: 'usual' or 'unseen': whether invented sites have the proportions asked for, or half as
            wide again and two thirds as deep (as far as sites go), drawn from other seeds.
        family: 'usual' or 'unseen': whether invented sites are of the family asked for, or of one with
            slanted walls.
        missing_scale: factor on the chance that a reading is missing.
        range_scale: factor on every measured range (a sensor out of calibration).
        odometry_noise_scale: factor on the spread of odometry noise.
        odometry_scale: factor on measured travel (worn wheels).
        plan_scale: how many times too large the plan was drawn.
        moved_walls: share of wall lines that stand elsewhere than drawn.
        moved_by_m: how far those stand from where they are drawn, metres.
        glass: share of wall lines that are glass.
        mount_turn_deg: how far the sensor is turned on the robot from what is declared, degrees,
            counter-clockwise.
        doors_shut: share of the doors drawn open or unknown that are shut.
        parked_s: how long the robot stands still, measuring, before it drives off, seconds.
        parked_rate_hz: strips a second while it stands.
    """

    furniture_per_100_m2: float = 5.5
    people: int = 1
    light_level: float = 1.0
    light_kelvin: float | None = None
    finishes: str = "usual"
    layout: str = "usual"
    family: str = "usual"
    missing_scale: float = 1.0
    range_scale: float = 1.0
    odometry_noise_scale: float = 1.0
    odometry_scale: float = 1.0
    plan_scale: float = 1.0
    moved_walls: float = 0.0
    moved_by_m: float = 0.3
    glass: float = 0.0
    mount_turn_deg: float = 0.0
    doors_shut: float = 0.0
    parked_s: float = 0.0
    parked_rate_hz: float = 10.0

    def __post_init__(self):
        for key in ("moved_walls", "glass", "doors_shut"):
            self._hold(key, 0 <= getattr(self, key) <= 1, "a share in [0, 1]")
        for key in ("light_level", "range_scale", "odometry_scale", "plan_scale", "parked_rate_hz"):
            self._hold(key, getattr(self, key) > 0, "a number above 0")
        for key in ("furniture_per_100_m2", "people", "missing_scale", "odometry_noise_scale"):
            self._hold(key, getattr(self, key) >= 0, "a number not below 0")
        for key in ("moved_by_m", "parked_s"):
            self._hold(key, getattr(self, key) >= 0, "a number not below 0")
        for key in ("finishes", "layout", "family"):
            self._hold(key, getattr(self, key) in ("usual", "unseen"), "'usual' or 'unseen'")
        kelvin = self.light_kelvin
        self._hold("light_kelvin", kelvin is None or 1667 <= kelvin <= 25000, "none or 1667 to 25000")

    def _hold(self, key: str, good: bool, expected: str) -> None:
        if not good:
            raise ConfigError(
                "out of range", place=f"condition.{key}", expected=expected, got=getattr(self, key)
            )

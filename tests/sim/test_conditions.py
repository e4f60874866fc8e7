"""The conditions we promise to be judged under, each as severe as we say."""

from pathlib import Path

import pytest
import yaml

from learnfilter.core.errors import ConfigError
from learnfilter.sim import Conditions

FOLDER = Path(__file__).resolve().parents[2] / "configs" / "condition"
# What the project is asked to be tried under, in the words of its brief beside each.
PROMISED = {
    "as-trained": {},
    "unseen-layout": {"layout": "unseen"},
    "unseen-family": {"family": "unseen"},
    "unseen-finishes": {"finishes": "unseen"},
    "dim-light": {"light_level": 0.3},
    "warm-light": {"light_kelvin": 2700.0},
    "furniture-doubled": {"furniture_per_100_m2": 2 * 5.5},
    "crowd": {"people": 6},
    "doors-shut": {"doors_shut": pytest.approx(1 / 3, abs=5e-5)},  # four digits of a third
    "missing-tripled": {"missing_scale": 3.0},
    "range-long": {"range_scale": 1.03},
    "odometry-noisy": {"odometry_noise_scale": 2.0},
    "odometry-long": {"odometry_scale": 1.02},
    "plan-large": {"plan_scale": 1.01},
    "walls-moved": {"moved_walls": 0.1, "moved_by_m": 0.3},
    "glass": {"glass": 0.1},
    "mount-turned": {"mount_turn_deg": 2.0},
    "parked": {"parked_s": 60.0, "parked_rate_hz": 10.0},
}


def conditions_in(name):
    """The keys that a file sets, on top of training."""
    return yaml.safe_load((FOLDER / f"{name}.yaml").read_text())


def test_every_condition_has_its_file():
    """One file each, and no other."""
    assert {file.stem for file in FOLDER.iterdir()} == PROMISED.keys()


def test_training_is_the_default():
    """The file that all others build on says what Conditions says, key by key."""
    assert conditions_in("as-trained") == vars(Conditions())


@pytest.mark.parametrize("name", sorted(PROMISED.keys() - {"as-trained"}))
def test_a_condition_is_as_severe_as_promised(name):
    """Its file sets these keys, to these values, and nothing else."""
    assert conditions_in(name) == PROMISED[name]
    Conditions(**conditions_in(name))


@pytest.mark.parametrize("key", ["finishes", "layout", "family"])
def test_unknown_kinds_of_sites_are_refused(key):
    """Usual or unseen; the message names the key."""
    with pytest.raises(ConfigError, match=f"condition.{key}"):
        Conditions(**{key: "strange"})

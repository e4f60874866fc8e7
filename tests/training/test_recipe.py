"""Stages in order: equal seeds give equal weights, and what is tuned gets better."""

from pathlib import Path

import numpy as np
import pytest
import torch

from learnfilter.core.errors import ConfigError
from learnfilter.filtering.course import Ground
from learnfilter.filtering.motion import MotionModel, MotionSettings
from learnfilter.observe.endpoint import EndpointFit
from learnfilter.observe.matcher import MatcherShape
from learnfilter.training.analytic import Fits, make_blend
from learnfilter.training.loop import StageSettings
from learnfilter.training.recipe import FilterSettings, MatchingSettings, Trainer
from learnfilter.training.validation import validate
from tests.contracts.small import FINE, LAYOUT, birth, colour_fit, mixture_fit, small_site
from tests.training.drives import drive_on_small_site, stills_on_small_site
from tests.training.tiny import Silent

FITS = Fits(FINE, mixture_fit(FINE), EndpointFit(), colour_fit(), np.array([1.0]), np.zeros((1, 3)))
SHAPE = MatcherShape(extra_rank=2, strip_hidden=4, ring_hidden=4)


class Deaf(Silent):
    """A log that does not care for pictures either."""

    def belief(self, tag, plane, iteration):
        pass


def trainer(folder, seed=0):
    courses = (drive_on_small_site(5, seed=1), drive_on_small_site(5, seed=2))
    ground = Ground(small_site(), courses, stills_on_small_site(12))
    return Trainer(
        [ground],
        [ground],
        [ground],
        FilterSettings(lengths=(2, 3), validate_steps=3),
        MatchingSettings(strips=6, decoys=10),
        seed,
        Path(folder),
        Deaf(),
        lambda *told: None,
    )


def matcher(folder, seed=0):
    """Bytes of all files that two short stages leave."""
    stages = [StageSettings(name, 3, validate_every=3) for name in ("matching", "filter")]
    trainer(folder, seed).train_matcher(birth(), SHAPE, LAYOUT, MotionSettings(), *stages)
    return {path.name: path.read_bytes() for path in Path(folder).iterdir()}


def test_the_same_seed_gives_the_same_weights_to_the_byte(tmp_path):
    """Both stages, checkpoints and best weights; another seed gives others."""
    first, again, other = (matcher(tmp_path / name, seed) for name, seed in (("a", 0), ("b", 0), ("c", 1)))
    assert first == again
    assert first["filter.safetensors"] != other["filter.safetensors"]


def test_tuning_makes_a_blend_better_on_its_own_drives(tmp_path):
    """Random strips deserve no trust: twenty steps lower both exponents and the nats of the truth."""
    stage = StageSettings("tune", 20, learning_rate=0.2, warm_up=1, validate_every=5)
    tuned = trainer(tmp_path).tune_blend("beam+colour", FITS, LAYOUT, MotionSettings(), stage)
    (result,) = tuned.stages.values()
    untuned = make_blend("beam+colour", LAYOUT, FITS)
    held_out = trainer(tmp_path).held_out
    assert result.best_score < validate(untuned, tuned.motion, held_out, held_out, 1e-4, 3).score
    for name, exponent in tuned.model.log_exponent.items():
        assert float(exponent.detach()) < float(untuned.log_exponent[name].detach())


@pytest.mark.parametrize("kind", ["sonar", "beam+sonar", "colour+colour", ""])
def test_an_unknown_analytic_model_is_named(kind):
    """With those there are."""
    with pytest.raises(ConfigError, match=r"beam \+ endpoint"):
        make_blend(kind, LAYOUT, FITS)


def test_colour_is_refused_where_none_was_fitted():
    """Strips or plans without colour."""
    with pytest.raises(ConfigError, match=r"beam\+colour"):
        make_blend("beam+colour", LAYOUT, FITS._replace(colour=None))


def test_validation_looks_at_nats_and_at_places():
    """A model without opinions: ln(poses) at the first strip, and a picture that sums to one."""
    blend = make_blend("beam", LAYOUT, FITS)
    with torch.no_grad():
        blend.log_exponent["beam"].fill_(-30.0)
    ground = Ground(small_site(), (drive_on_small_site(5, seed=1),))
    result = validate(blend, MotionModel(), [ground], [ground], 1e-4, 1)
    assert result.score == pytest.approx(np.log(small_site().n_cells * 16), rel=1e-5)
    assert result.curves == {"located": 0.0}
    assert result.picture.sum() == pytest.approx(1, abs=1e-5)

"""Models written as tensors and facts come back as they were."""

import pytest
import torch
from torch import nn

from learnfilter.core.errors import InputError
from learnfilter.observe.blend import Blend
from learnfilter.observe.describe import KINDS, describe, rebuild
from learnfilter.observe.matcher import Matcher, MatcherShape
from learnfilter.training.checkpoint import load_tensors, save_tensors
from tests.contracts.small import (
    LAYOUT,
    MODELS,
    TWO_LOOKS,
    beam,
    birth,
    colour,
    endpoint,
    score,
    small_site,
    strips,
)


def both(layout=LAYOUT):
    return Blend({"endpoint": endpoint(layout), "colour": colour(layout)}, {"endpoint": 0.17, "colour": 0.9})


def lone(layout=LAYOUT):
    return Blend({"beam": beam(layout)}, {"beam": 0.2})


def tuned(layout=LAYOUT):
    """Exponents as training leaves them: any float32."""
    model = both(layout)
    with torch.no_grad():
        for number, value in enumerate(model.log_exponent.values()):
            value.copy_(torch.tensor(-1.2345678 - number / 3))
    return model


def narrow(layout=LAYOUT):
    """A matcher of other sizes than usual."""
    shape = MatcherShape(extra_rank=2, strip_hidden=5, ring_hidden=3, kernel=3)
    return Matcher(layout, birth(7, 4), shape, torch.Generator().manual_seed(2))


def analytic_matcher(layout=LAYOUT):
    """A matcher without its residual part."""
    return Matcher(layout, birth(), MatcherShape(residual=False), torch.Generator().manual_seed(0))


MADE = {**MODELS, "endpoint and colour": both, "one part": lone, "tuned blend": tuned,
        "narrow matcher": narrow, "matcher without residual": analytic_matcher}  # fmt: skip


def written_and_read(model, path, layout):
    """What another process would make of a model file."""
    facts, tensors = describe(model)
    save_tensors(path, tensors, {"model": facts})
    tensors, facts = load_tensors(path)
    return rebuild(layout, facts["model"], tensors)


@pytest.mark.parametrize("name", MADE)
@pytest.mark.parametrize("layout", [LAYOUT, TWO_LOOKS], ids=["one look", "two looks"])
def test_a_model_read_back_scores_the_same_to_the_bit(name, layout, tmp_path):
    """Through a file, on strips with colour and gaps."""
    model = MADE[name](layout)
    again = written_and_read(model, tmp_path / "model.safetensors", layout)
    site, seen = small_site(layout), strips(layout=layout)
    assert torch.equal(score(again, seen, site), score(model, seen, site))


def test_every_kind_there_is_is_among_those_tested():
    """A new kind must be added above."""
    assert {describe(make())[0]["kind"] for make in MADE.values()} == KINDS.keys()


def test_a_matcher_read_back_can_be_trained_on():
    """Its weights are parameters again, as many as before."""
    facts, tensors = describe(MODELS["trained matcher"]())
    counts = [sum(p.numel() for p in m.parameters() if p.requires_grad)
              for m in (rebuild(LAYOUT, facts, tensors), MODELS["trained matcher"]())]  # fmt: skip
    assert counts[0] == counts[1] > 0


@pytest.mark.parametrize("facts", [{"kind": "oracle"}, {}])
def test_an_unknown_kind_is_refused(facts):
    """A file of a newer version, or none of ours: the kinds there are are named."""
    with pytest.raises(InputError, match="beam or endpoint"):
        rebuild(LAYOUT, facts, {})


def test_a_model_that_has_no_entry_cannot_be_described():
    """Rather than written as something else."""
    with pytest.raises(InputError, match="Identity"):
        describe(nn.Identity())

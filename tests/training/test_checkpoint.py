"""Checkpoints come back as they went, and refuse what is not theirs."""

import json

import pytest
import torch
from safetensors.torch import save_file
from torch import nn
from torch.testing import assert_close

from learnfilter.core.errors import InputError
from learnfilter.observe.matcher import Matcher, MatcherShape
from learnfilter.training.checkpoint import SCHEMA, load_tensors, pack, save_tensors, unpack
from tests.contracts.small import LAYOUT, birth, trained, untrained


def optimised(model, steps):
    """An Adam that has taken some steps."""
    optimiser = torch.optim.Adam(model.parameters(), lr=0.01)
    for _ in range(steps):
        optimiser.zero_grad()
        sum(p.square().sum() for p in model.parameters()).backward()
        optimiser.step()
    return optimiser


def test_training_goes_on_as_if_never_stopped(tmp_path):
    """Two steps, saved, loaded into a fresh model and optimiser, a third: equal to three at a stretch."""
    torch.manual_seed(0)
    first, whole = nn.Linear(3, 2), nn.Linear(3, 2)
    whole.load_state_dict(first.state_dict())
    save_tensors(tmp_path / "a.safetensors", pack({"model": first}, optimised(first, 2)), {"iteration": 2})
    again = nn.Linear(3, 2)
    optimiser = torch.optim.Adam(again.parameters(), lr=0.01)
    tensors, facts = load_tensors(tmp_path / "a.safetensors")
    unpack(tensors, {"model": again}, optimiser)
    sum(p.square().sum() for p in again.parameters()).backward()
    optimiser.step()
    optimised(whole, 3)
    assert facts["iteration"] == 2
    for got, expected in zip(again.parameters(), whole.parameters(), strict=True):
        assert_close(got, expected, rtol=0, atol=0)


def test_a_matcher_comes_back_with_its_buffers(tmp_path):
    """Every tensor of its state."""
    model, other = trained(), untrained()
    save_tensors(tmp_path / "a.safetensors", pack({"model": model}, None), {})
    unpack(load_tensors(tmp_path / "a.safetensors")[0], {"model": other}, None)
    for key, expected in model.state_dict().items():
        assert_close(other.state_dict()[key], expected, rtol=0, atol=0)


def test_a_matcher_without_colour_can_be_kept(tmp_path):
    """Its colour tensors are empty."""
    model = Matcher(LAYOUT, birth()._replace(colour_factors=None), MatcherShape(), torch.Generator())
    save_tensors(tmp_path / "a.safetensors", pack({"model": model}, None), {})
    assert load_tensors(tmp_path / "a.safetensors")[0]["model/landmarks"].shape == (0, 3)


def test_equal_values_give_equal_bytes(tmp_path):
    """Whatever the order of tensors and facts."""
    a, b = torch.zeros(2), torch.ones(3)
    save_tensors(tmp_path / "1", {"a": a, "b": b}, {"x": 1, "y": 2})
    save_tensors(tmp_path / "2", {"b": b.clone(), "a": a.clone()}, {"y": 2, "x": 1})
    assert (tmp_path / "1").read_bytes() == (tmp_path / "2").read_bytes()


def damage(path, how):
    whole = path.read_bytes()
    path.write_bytes({"cut": whole[: len(whole) // 2], "empty": b"", "header": b"\xff" * 8 + whole[8:]}[how])


@pytest.mark.parametrize("how", ["cut", "empty", "header"])
def test_a_damaged_file_is_named(tmp_path, how):
    """An InputError with the file's name, whatever the damage."""
    path = tmp_path / "matching.safetensors"
    save_tensors(path, {"a": torch.zeros(100)}, {})
    damage(path, how)
    with pytest.raises(InputError, match=r"matching\.safetensors"):
        load_tensors(path)


def test_somebody_elses_tensors_are_refused(tmp_path):
    """Without our facts."""
    save_file({"a": torch.zeros(1)}, tmp_path / "a.safetensors")
    with pytest.raises(InputError, match="cannot be read"):
        load_tensors(tmp_path / "a.safetensors")


def test_a_newer_schema_is_refused_by_number(tmp_path):
    """The message says which one came."""
    facts = {"learnfilter": json.dumps({"schema": SCHEMA + 1})}
    save_file({"a": torch.zeros(1)}, tmp_path / "a.safetensors", metadata=facts)
    with pytest.raises(InputError, match=f"got {SCHEMA + 1}"):
        load_tensors(tmp_path / "a.safetensors")

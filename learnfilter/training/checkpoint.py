"""Checkpoints without pickle: tensors in safetensors, everything else as one sorted JSON string.

A checkpoint holds all a stage needs to go on as if it had never stopped.  Random draws are not in
it: every iteration draws from a stream named by its number (core/seeds.py).
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import torch
from safetensors import safe_open
from safetensors.torch import save_file
from torch import Tensor, nn

from learnfilter.core.errors import InputError
from learnfilter.core.files import whole_file

SCHEMA = 1


def save_tensors(path: Path, tensors: dict[str, Tensor], facts: dict[str, Any]) -> None:
    """Write tensors and facts whole or not at all; the bytes depend on their values alone."""
    text = json.dumps({"schema": SCHEMA, **facts}, sort_keys=True)
    with whole_file(path) as beside:
        save_file(
            {k: tensors[k].detach().contiguous() for k in sorted(tensors)},
            beside,
            metadata={"learnfilter": text},
        )


def load_tensors(path: Path) -> tuple[dict[str, Tensor], dict[str, Any]]:
    """Read what `save_tensors` wrote.

    Raises:
        InputError: damaged, not ours, or of a newer schema.
    """
    try:
        with safe_open(path, framework="pt") as file:
            facts = json.loads((file.metadata() or {})["learnfilter"])
            tensors = {key: file.get_tensor(key) for key in file.keys()}  # noqa: SIM118 - not a dict
    except Exception as error:
        raise InputError("cannot be read as tensors of ours", file=path, got=error) from error
    if facts["schema"] > SCHEMA:
        raise InputError(
            "newer than this program", file=path, expected=f"schema <= {SCHEMA}", got=facts["schema"]
        )
    return tensors, facts


def pack(modules: dict[str, nn.Module], optimiser: torch.optim.Optimizer | None) -> dict[str, Tensor]:
    """Parameters of modules and moments of their optimiser, under flat names."""
    tensors = {
        f"{name}/{key}": value
        for name, module in modules.items()
        for key, value in module.state_dict().items()
    }
    if optimiser is not None:
        for number, state in optimiser.state_dict()["state"].items():
            tensors |= {f"optimiser/{number}/{key}": torch.as_tensor(value) for key, value in state.items()}
    return tensors


def unpack(
    tensors: dict[str, Tensor], modules: dict[str, nn.Module], optimiser: torch.optim.Optimizer | None
) -> None:
    """Put back what `pack` took, in place."""
    for name, module in modules.items():
        prefix = f"{name}/"
        module.load_state_dict({k[len(prefix) :]: v for k, v in tensors.items() if k.startswith(prefix)})
    if optimiser is not None:
        state: dict[int, dict[str, Tensor]] = {}
        for key, value in tensors.items():
            if key.startswith("optimiser/"):
                _, number, field = key.split("/")
                state.setdefault(int(number), {})[field] = value
        whole = optimiser.state_dict()
        optimiser.load_state_dict({"state": state, "param_groups": whole["param_groups"]})

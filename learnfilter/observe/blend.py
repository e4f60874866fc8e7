"""Sums of models, each under an exponent of its own.

Columns share causes, so their independence is a fiction; an exponent below one pays for it.
Exponents are the only weights of an analytic model and are learned through the filter.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, cast

import torch
from torch import Tensor, nn

from learnfilter.observe.contract import ObservationModel, Strips
from learnfilter.render.site import Site


class Blend(ObservationModel):
    """Sum over parts of exponent x log-likelihood.

    Args:
        parts: name -> model, all on one layout.
        exponents: name -> starting exponent, > 0.
    """

    def __init__(self, parts: Mapping[str, ObservationModel], exponents: Mapping[str, float]):
        super().__init__()
        self.layout = next(iter(parts.values())).layout
        self.parts = nn.ModuleDict(parts)
        self.log_exponent = nn.ParameterDict(
            {name: nn.Parameter(torch.tensor(float(exponents[name])).log()) for name in parts}
        )

    def read(self, site: Site) -> dict[str, Any]:
        return {name: self.part(name).read(site) for name in self.parts}

    def scores(self, strips: Strips, features: dict[str, Any]) -> Tensor:
        weighed = [
            self.log_exponent[name].exp() * self.part(name).scores(strips, features[name])
            for name in self.parts
        ]
        return torch.stack(weighed).sum(0)

    def part(self, name: str) -> ObservationModel:
        """One of the models that are summed."""
        return cast(ObservationModel, self.parts[name])

"""The factored matcher: log-likelihoods of all poses as one matrix product.

    log-lik(h, cell) = sum over w of phi(strip)[w] . psi(ring)[h K + first + w]

Channels of phi and psi, in order: range factors, colour factors, extra factors, range bias, colour
bias (a bias is a channel whose phi says whether the column takes part).  The first two and the biases
start as the fitted analytic evidence; small convolutions add a residual whose last layers are zero at
birth, so an untrained matcher filters like the blend it was born from.  Factored score functions are
common in retrieval; this arrangement is ours.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import torch
from torch import Tensor, nn
from torch.nn import functional as F

from learnfilter.core.errors import ConfigError
from learnfilter.core.scale import RangeScale
from learnfilter.core.strip import RingLayout
from learnfilter.observe.colour import DARK
from learnfilter.observe.contract import ObservationModel, SiteTensors, Strips, site_tensors
from learnfilter.observe.factors import ColourFactors, RangeFactors
from learnfilter.observe.product import match
from learnfilter.render.site import Site

GATE_LIMIT = 2.0  # a column may count for at most e^2 times its analytic evidence: keeps steps tame


@dataclass(frozen=True)
class MatcherShape:
    """Sizes and switches, each an ablation.

    Attributes:
        extra_rank: factors that start from nothing.
        strip_hidden, ring_hidden: channels of the convolutions.
        kernel: columns a convolution sees, odd.
        residual: whether the convolutions take part at all.
    """

    extra_rank: int = 6
    strip_hidden: int = 24
    ring_hidden: int = 16
    kernel: int = 5
    residual: bool = True

    def __post_init__(self):
        if self.kernel % 2 == 0 or min(self.strip_hidden, self.ring_hidden) < 1 or self.extra_rank < 0:
            raise ConfigError(
                "sizes must be positive and the kernel odd", place="observe.matcher", got=str(self)
            )


class Birth(NamedTuple):
    """What a matcher is born from: factors of a fitted blend and its exponents.

    Attributes:
        scale: nodes of the range factors.
        range_factors: factored mixture.
        colour_factors: factored kernel, or None for a sensor without colour.
        colour_weight, level_power, level: of the fitted colour model.
        colour_spread: width of the kernel in log units.
        range_exponent, colour_exponent: as tuned for the blend.
    """

    scale: RangeScale
    range_factors: RangeFactors
    colour_factors: ColourFactors | None
    colour_weight: float
    colour_spread: float
    level_power: float
    level: float
    range_exponent: float
    colour_exponent: float


def _buffer(array) -> Tensor:
    return torch.tensor(np.asarray(array), dtype=torch.float32)


class Matcher(ObservationModel):
    """See the module's docstring.

    Args:
        layout: how strips lie on rings.
        birth: the analytic start.
        shape: sizes and switches.
        generator: draws the starting weights.
    """

    measured: Tensor
    expected: Tensor
    range_bias: Tensor
    landmarks: Tensor
    root: Tensor
    background: Tensor
    colour_fit: Tensor

    def __init__(self, layout: RingLayout, birth: Birth, shape: MatcherShape, generator: torch.Generator):
        super().__init__()
        self.layout, self.shape, self.scale = layout, shape, birth.scale
        self.register_buffer("measured", _buffer(birth.range_factors.measured))
        self.register_buffer("expected", _buffer(birth.range_factors.expected))
        self.register_buffer("range_bias", _buffer(birth.range_factors.bias))
        colour = birth.colour_factors or ColourFactors(np.zeros((0, 3)), np.zeros((0, 0)), np.zeros((1, 0)))
        self.register_buffer("landmarks", _buffer(colour.landmarks))
        self.register_buffer("root", _buffer(colour.root))
        self.register_buffer("background", _buffer(colour.background))
        self.register_buffer(
            "colour_fit", _buffer([birth.colour_weight, birth.colour_spread, birth.level_power, birth.level])
        )
        self.log_range_exponent = nn.Parameter(torch.tensor(birth.range_exponent).log())
        self.log_colour_exponent = nn.Parameter(torch.tensor(birth.colour_exponent).log())
        if shape.residual:
            self._make_residual(generator)

    @property
    def ranks(self) -> tuple[int, int, int]:
        """Number of range, colour and extra channels."""
        return self.measured.shape[1], self.root.shape[1], self.shape.extra_rank * self.shape.residual

    @property
    def channels(self) -> int:
        return sum(self.ranks) + 2

    def _make_residual(self, generator: torch.Generator) -> None:
        range_rank, colour_rank, extra = self.ranks
        shape, known = self.shape, range_rank + colour_rank
        self.strip_in = nn.Conv1d(known + 4, shape.strip_hidden, shape.kernel)
        self.strip_mid = nn.Conv1d(shape.strip_hidden, shape.strip_hidden, shape.kernel)
        self.strip_out = nn.Linear(2 * shape.strip_hidden, 2 + known + extra)
        self.ring_in = nn.Conv1d(known + 4, shape.ring_hidden, shape.kernel)
        self.ring_mid = nn.Conv1d(shape.ring_hidden, shape.ring_hidden, shape.kernel)
        self.ring_out = nn.Linear(shape.ring_hidden, self.channels)
        with torch.no_grad():
            for layer in (self.strip_in, self.strip_mid, self.strip_out, self.ring_in, self.ring_mid):
                fan = layer.weight[0].numel()
                layer.weight.normal_(0.0, (2.0 / fan) ** 0.5, generator=generator)
                assert layer.bias is not None
                layer.bias.zero_()
            # born silent: the ring's residual and all of the strip's but the extra factors are zero
            self.strip_out.weight[: 2 + known].zero_()
            self.ring_out.weight.zero_()
            self.ring_out.bias.zero_()

    # ---- colour and range features, fixed at birth -------------------------------------------------

    def _hats(self, range_m: Tensor) -> tuple[Tensor, Tensor]:
        """Lower node and weight of the upper one; as RangeScale.hats, on tensors."""
        scale = self.scale
        clamped = torch.nan_to_num(range_m, nan=0.0, posinf=scale.max_range_m).clamp(0, scale.max_range_m)
        position = torch.log1p(clamped * (scale.growth / scale.first_m)) / scale.growth
        lower = position.floor().clamp(max=scale.nodes - 2)
        return lower.long(), (position - lower).clamp(max=1.0)

    def _between(self, table: Tensor, range_m: Tensor) -> Tensor:
        """Rows of `table` interpolated at each range: [... k]."""
        lower, upper_weight = self._hats(range_m)
        upper_weight = upper_weight.unsqueeze(-1)
        return table[lower] * (1 - upper_weight) + table[lower + 1] * upper_weight

    def _colour_features(self, log_rgb: Tensor) -> Tensor:
        """[... k] factored kernel features of log colours [... 3]."""
        square = (log_rgb.unsqueeze(-2) - self.landmarks).square().sum(-1)
        return torch.exp(-0.5 * square / self.colour_fit[1] ** 2) @ self.root

    def _strip_features(self, strips: Strips) -> tuple[Tensor, Tensor, Tensor, Tensor]:
        """Range [b w k], colour [b w k], seen [b w] and context [b w 4] of strips."""
        came_back = torch.isfinite(strips.depth_m) & strips.present
        table = self._between(self.measured, strips.depth_m)
        table = torch.where(came_back.unsqueeze(-1), table, self.measured[-1])
        table = table * strips.present[:, None]
        seen = torch.isfinite(strips.rgb).all(-1) & strips.present
        log_rgb = torch.log(torch.nan_to_num(strips.rgb).clamp(min=0) + DARK)
        count = seen.sum(-1, keepdim=True).clamp(min=1)
        level = (log_rgb.mean(-1) * seen).sum(-1, keepdim=True) / count
        _, _, power, reference = self.colour_fit
        levelled = log_rgb - (power * (level - reference)).unsqueeze(-1)
        colour = self._colour_features(levelled) * seen.unsqueeze(-1)
        position = self._hats(strips.depth_m)
        place = (position[0] + position[1]) / self.scale.nodes * came_back
        context = torch.stack(
            [place, came_back.float(), seen.float(), (level - reference).expand_as(place) * seen], -1
        )
        return table, colour, seen, context

    def phi(self, strips: Strips) -> Tensor:
        """[b w channels] what the strip asks of each ring bearing it looks at."""
        table, colour, seen, context = self._strip_features(strips)
        present = strips.present.to(table.dtype).expand(table.shape[:2])
        range_gate = self.log_range_exponent.expand(table.shape[:2])
        colour_gate = self.log_colour_exponent.expand(table.shape[:2])
        extra = table.new_zeros(*table.shape[:2], 0)
        if self.shape.residual:
            hidden = torch.cat([table, colour, context], -1).transpose(1, 2)
            margin = self.shape.kernel // 2
            hidden = F.relu(self.strip_in(F.pad(hidden, (margin, margin))))
            hidden = F.relu(self.strip_mid(F.pad(hidden, (margin, margin)))).transpose(1, 2)
            pooled = hidden.mean(1, keepdim=True).expand_as(hidden)
            out = self.strip_out(torch.cat([hidden, pooled], -1)) * present.unsqueeze(-1)
            range_gate = range_gate + GATE_LIMIT * torch.tanh(out[..., 0] / GATE_LIMIT)
            colour_gate = colour_gate + GATE_LIMIT * torch.tanh(out[..., 1] / GATE_LIMIT)
            range_rank, colour_rank, _ = self.ranks
            table_add, colour_add, extra = out[..., 2:].split([range_rank, colour_rank, self.ranks[2]], -1)
            table, colour = table + table_add, colour + colour_add * seen.unsqueeze(-1)
        range_gate, colour_gate = range_gate.exp() * present, colour_gate.exp() * seen
        return torch.cat(
            [
                table * range_gate.unsqueeze(-1),
                colour * (self.colour_fit[0] * colour_gate).unsqueeze(-1),
                extra,
                range_gate.unsqueeze(-1),
                colour_gate.unsqueeze(-1),
            ],
            -1,
        )

    # ---- the plan's side ---------------------------------------------------------------------------

    def fixed_psi(self, site: SiteTensors) -> tuple[Tensor, Tensor]:
        """[n p channels] analytic features and [n p 4] context of rings; no weights take part."""
        nodes, unsure = self.scale.nodes, site.unsure.unsqueeze(-1)
        beyond = (site.range_m > self.scale.max_range_m).unsqueeze(-1)
        both = torch.cat([self.expected, self.range_bias[:, None]], 1)
        table = torch.where(beyond, both[nodes], self._between(both[:nodes], site.range_m))
        table = torch.where(unsure, both[nodes + 1], table)
        colour = self._palette_features(site.palette)[site.finish]
        known = (site.finish < len(site.palette) - 1).float()
        lower, upper = self._hats(site.range_m)
        place = (lower + upper) / nodes
        context = torch.stack([place, beyond[..., 0].float(), unsure[..., 0].float(), known], -1)
        extra = table.new_zeros(*table.shape[:2], self.ranks[2])
        psi = torch.cat([table[..., :-1], colour[..., :-1], extra, table[..., -1:], colour[..., -1:]], -1)
        return psi, context

    def _palette_features(self, palette: Tensor) -> Tensor:
        """[f k + 1] kernel features and -log Z of each finish; zero in the last row, 'unknown'."""
        features = self._colour_features(torch.log(palette.clamp(min=0) + DARK))
        tilt = self.colour_fit[0] * features @ self.background.T
        bias = -(torch.logsumexp(tilt, 1) - np.log(max(len(self.background), 1)))
        both = torch.cat([features, bias[:, None]], 1)
        both[-1] = 0.0
        return both

    def psi(self, fixed: Tensor, context: Tensor) -> Tensor:
        """[n p channels] fixed features plus the learned residual, which is silent where the plan is."""
        if not self.shape.residual:
            return fixed
        range_rank, colour_rank, extra = self.ranks
        hidden = torch.cat([fixed[..., : range_rank + colour_rank], context], -1).transpose(1, 2)
        margin = self.shape.kernel // 2
        hidden = F.relu(self.ring_in(F.pad(hidden, (margin, margin), mode="circular")))
        hidden = F.relu(self.ring_mid(F.pad(hidden, (margin, margin), mode="circular")))
        sure, known = 1 - context[..., 2], context[..., 3]
        spoken = [sure] * range_rank + [known] * colour_rank + [sure] * (extra + 1) + [known]
        return fixed + self.ring_out(hidden.transpose(1, 2)) * torch.stack(spoken, -1)

    def read(self, site: Site, chunk: int = 2048) -> Tensor:
        """[n p channels] for every live cell, in chunks so that memory stays small."""
        tensors = site_tensors(site)
        parts = torch.arange(site.n_cells).split(chunk)
        return torch.cat([self.psi(*self.fixed_psi(tensors.cells(part))) for part in parts])

    def scores(self, strips: Strips, features: Tensor) -> Tensor:
        return match(self.phi(strips), features, self.layout.finer())

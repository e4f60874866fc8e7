"""Carry a belief through one odometry reading.

Belief axes [b h r c], heading first: each heading's plane is shifted by the measured motion under
that heading and blurred by the motion's noise, then the heading axis is turned likewise.  Särkkä
(2013), ch. 4, prediction step; the discretisation is ours:

- one kernel an axis does whole cells, remainder and blur at once.  Its weights are a Gaussian seen
  through linear interpolation, so mass and mean are exact; interpolation adds variance of its own,
  which is taken off the noise first, so that only what exceeds the noise smears;
- mass that would leave the live cells, or jump a wall on the way, is removed and the rest
  renormalised; what was lost is returned, since much loss means the belief was wrong.

The loops are in kernels.py.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import torch
from torch import Tensor, nn

from learnfilter.filtering.kernels import clear_paths, shift_planes

SOFTNESS = 0.01  # cells^2; how gently noise gives way to interpolation: sharper starves gradients
LEAST_VARIANCE = 1e-6  # cells^2; keeps the kernel differentiable at zero noise


class MotionSettings(NamedTuple):
    """Odometry noise as standard deviations.

    Attributes:
        turn_from_turn: radians a radian turned.
        turn_from_travel: radians a metre travelled.
        travel_from_travel: metres a metre travelled (along and across alike).
        travel_from_turn: metres a radian turned.
    """

    turn_from_turn: float = 0.05
    turn_from_travel: float = 0.02
    travel_from_travel: float = 0.05
    travel_from_turn: float = 0.01


class MotionModel(nn.Module):
    """Noise of odometry with learned spreads."""

    def __init__(self, settings: MotionSettings = MotionSettings()):  # noqa: B008 - immutable
        super().__init__()
        self.log_spread = nn.Parameter(torch.tensor(settings).log())

    def settings(self) -> MotionSettings:
        """The current spreads as plain numbers."""
        return MotionSettings(*self.log_spread.detach().exp().tolist())

    def variances(self, odometry: Tensor) -> tuple[Tensor, Tensor]:
        """Variance of travel (metres squared, each axis) and of turn (radians squared), [b] each."""
        travel = odometry[:, :2].square().sum(-1)
        turn = odometry[:, 2].square()
        turn_turn, turn_travel, travel_travel, travel_turn = self.log_spread.exp().square()
        return travel_travel * travel + travel_turn * turn, turn_turn * turn + turn_travel * travel


class Lattice(NamedTuple):
    """What the filter needs of a site's grid.

    Attributes:
        live: [r c] bool.
        cell_m: side of a cell.
        headings: [h] radians.
        cells: [n] flat index of each live cell into r x c.
    """

    live: Tensor
    cell_m: float
    headings: Tensor
    cells: Tensor


def _interpolation_variance(mean: Tensor, variance: Tensor) -> Tensor:
    """Variance that linear interpolation adds to a Gaussian, cells^2 (first harmonics of f(1 - f))."""
    total = torch.full_like(mean, 1 / 6)
    for n in (1, 2, 3):
        damp = torch.exp(-2 * (torch.pi * n) ** 2 * variance)
        total = total - torch.cos(2 * torch.pi * n * mean) * damp / (torch.pi * n) ** 2
    return total


def shift_weights(mean: Tensor, variance: Tensor, offsets: Tensor) -> Tensor:
    """Weights [... k] of integer offsets [k] for a shift of `mean` cells with `variance` cells^2.

    Sums to one and has mean `mean` exactly where `offsets` span it; variance is `variance` where that
    exceeds what interpolation adds, else the latter.
    """
    taken = _interpolation_variance(mean, (variance - 1 / 6).clamp(min=0))
    spare = SOFTNESS * nn.functional.softplus((variance - taken) / SOFTNESS) + LEAST_VARIANCE
    spread = spare.sqrt().unsqueeze(-1)

    def ramp(x: Tensor) -> Tensor:
        """Integral of the normal distribution function: a smoothed max(x, 0)."""
        u = x / spread
        return x * torch.special.ndtr(u) + spread * torch.exp(-0.5 * u * u) * 0.3989422804014327

    x = offsets - mean.unsqueeze(-1)
    return ramp(x + 1) - 2 * ramp(x) + ramp(x - 1)


def _taps(mean: Tensor, variance: Tensor) -> tuple[Tensor, Tensor]:
    """First offset [...] int64 and weights [... k] of the taps that hold a kernel within 4 sigma."""
    reach = 1 + math.ceil(4.0 * float(variance.detach().max().sqrt()))
    first = mean.detach().round() - reach
    offsets = first.unsqueeze(-1) + torch.arange(2 * reach + 1, dtype=mean.dtype)
    # second differences in float32 are noise of 1e-7 where tails, and the filter's floor, are far smaller
    weights = shift_weights(mean.double(), variance.double(), offsets.double()).clamp(min=0)
    return first.long(), (weights / weights.sum(-1, keepdim=True)).to(mean.dtype)


def _turn(belief: Tensor, mean: Tensor, variance: Tensor) -> Tensor:
    """Turn along the heading axis, which wraps; mean and variance [b] in bins."""
    first, weights = _taps(mean, variance)
    turned = []
    for planes, offset, tap in zip(belief, first.tolist(), weights, strict=True):
        turned.append(sum(planes.roll(offset + k, dims=0) * w for k, w in enumerate(tap)))
    return torch.stack(turned)


def predict(belief: Tensor, odometry: Tensor, lattice: Lattice, motion: MotionModel) -> tuple[Tensor, Tensor]:
    """Push the belief through one odometry reading, p(pose_t | strips before t).

    Args:
        belief: [b h r c] probabilities, zero off the live cells.
        odometry: [b 3] forward_m, left_m, turn_rad of the sensor, in its previous frame.
        lattice: live cells and headings.
        motion: noise.

    Returns:
        The belief, summing to one, and the share of mass lost into walls [b].  Where all mass was
        lost the belief is uniform over live poses.
    """
    travel_variance, turn_variance = motion.variances(odometry)
    cos, sin = lattice.headings.cos(), lattice.headings.sin()
    forward, left = odometry[:, 0:1], odometry[:, 1:2]
    shift_c = (forward * cos - left * sin) / lattice.cell_m
    shift_r = (forward * sin + left * cos) / lattice.cell_m
    # a heading anywhere in its bin moves sideways by up to half a bin: uniform, variance step^2 / 12
    step = 2 * torch.pi / len(lattice.headings)
    across = odometry[:, :2].square().sum(-1, keepdim=True) * step**2 / 12 / lattice.cell_m**2
    direction = torch.atan2(shift_r, shift_c).detach()
    base = travel_variance[:, None] / lattice.cell_m**2
    first_r, weights_r = _taps(shift_r, base + across * direction.cos() ** 2)
    first_c, weights_c = _taps(shift_c, base + across * direction.sin() ** 2)
    moved = shift_planes(
        belief.flatten(0, 1),
        first_r.flatten(),
        first_c.flatten(),
        weights_r.flatten(0, 1),
        weights_c.flatten(0, 1),
    )
    clear = clear_paths(
        lattice.live.numpy(), shift_r.detach().flatten().numpy(), shift_c.detach().flatten().numpy()
    )
    moved = (moved * torch.from_numpy(clear)).view_as(belief)
    kept = moved.sum((1, 2, 3))
    uniform = lattice.live / (lattice.live.sum() * len(lattice.headings))
    moved = torch.where(
        (kept > 1e-12)[:, None, None, None], moved / kept.clamp(min=1e-12)[:, None, None, None], uniform
    )
    turned = _turn(moved, odometry[:, 2] / step, turn_variance / step**2)
    return turned, 1 - kept

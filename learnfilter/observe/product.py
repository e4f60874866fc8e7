"""The product that scores all poses: strips against windows of rings.

For one heading the strip looks at one contiguous window of every ring, so its scores are a matrix
product with a strided view: nothing is copied and no zero is multiplied.  Autograd would allocate a
whole ring table a heading for these overlapping views; the backward pass below adds into one.
"""

from __future__ import annotations

from typing import Any

import torch
from torch import Tensor
from torch.autograd.function import once_differentiable

from learnfilter.core.strip import RingLayout


def _windows(wrapped: Tensor, layout: RingLayout, columns: int) -> list[Tensor]:
    """The strip's window at each heading, [n w*f] views of rings [n p+w f] that begin at `first`."""
    headings = layout.bearings // layout.bearings_per_heading
    starts = [h * layout.bearings_per_heading for h in range(headings)]
    flat, channels = wrapped.flatten(1), wrapped.shape[2]
    return [flat[:, s * channels : (s + columns) * channels] for s in starts]


def _wrap(psi: Tensor, layout: RingLayout, columns: int) -> Tensor:
    rolled = psi.roll(-layout.first, dims=1)
    return torch.cat([rolled, rolled[:, :columns]], dim=1)


class _Match(torch.autograd.Function):
    @staticmethod
    def forward(ctx: Any, phi: Tensor, psi: Tensor, layout: RingLayout) -> Tensor:
        columns = phi.shape[1]
        wrapped = _wrap(psi, layout, columns)
        ctx.save_for_backward(phi, wrapped)
        ctx.layout = layout
        scores = [window @ phi.flatten(1).T for window in _windows(wrapped, layout, columns)]
        return torch.stack(scores, dim=-1).transpose(0, 1)

    @staticmethod
    @once_differentiable
    def backward(ctx: Any, grad: Tensor) -> tuple[Tensor, Tensor, None]:
        phi, wrapped = ctx.saved_tensors
        columns, layout = phi.shape[1], ctx.layout
        flat = phi.flatten(1)
        grad_phi, grad_wrapped = torch.zeros_like(flat), torch.zeros_like(wrapped)
        windows = _windows(wrapped, layout, columns)
        targets = _windows(grad_wrapped, layout, columns)
        by_heading = grad.permute(2, 1, 0).contiguous()
        for scores, window, target in zip(by_heading, windows, targets, strict=True):
            grad_phi.addmm_(scores.T, window)
            target.addmm_(scores, flat)
        bearings = layout.bearings
        grad_psi = grad_wrapped[:, :bearings].clone()
        grad_psi[:, :columns] += grad_wrapped[:, bearings:]
        return grad_phi.view_as(phi), grad_psi.roll(layout.first, dims=1), None


def match(phi: Tensor, psi: Tensor, layout: RingLayout) -> Tensor:
    """Scores of all poses, sum over w of phi[w] . psi[(h K + first + w) mod P].

    Args:
        phi: [b w f] strips.
        psi: [n p f] rings.
        layout: K, P and first.

    Returns:
        [b n h].
    """
    return _Match.apply(phi, psi, layout)

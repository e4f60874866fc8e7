"""Shift planes by a few taps: the filter's inner loops, with gradients.

A tap is an integer shift with a weight; every plane [b h] has its own whole-cell offset and `k` taps
from there.  In torch each tap would be a padded copy of the whole belief; here all taps of a plane
are summed in place.  Tested with gradcheck and against plain loops.
"""

from __future__ import annotations

from typing import Any

import numba
import numpy as np
import torch
from torch import Tensor
from torch.autograd.function import once_differentiable


@numba.njit(cache=True, parallel=True)
def _shift_planes(planes, offset_r, offset_c, weights_r, weights_c, sign, out):
    """out[i, r + o, c + o'] += weights x planes[i, r, c] for all taps, rows then columns; sign -1
    runs every shift backwards (the transpose)."""
    count, rows, columns = planes.shape
    for i in numba.prange(count):
        half = np.zeros((rows, columns), planes.dtype)
        for k in range(weights_r.shape[1]):
            shift, weight = sign * (offset_r[i] + k), weights_r[i, k]
            for r in range(max(0, shift), min(rows, rows + shift)):
                for c in range(columns):
                    half[r, c] += weight * planes[i, r - shift, c]
        for k in range(weights_c.shape[1]):
            shift, weight = sign * (offset_c[i] + k), weights_c[i, k]
            low, high = max(0, shift), min(columns, columns + shift)
            for r in range(rows):
                for c in range(low, high):
                    out[i, r, c] += weight * half[r, c - shift]


@numba.njit(cache=True, parallel=True)
def _weight_gradients(planes, grad, offset_r, offset_c, weights_r, weights_c, grad_r, grad_c):
    """Gradients of the taps' weights: inner products of `grad` with what each tap moved."""
    count, rows, columns = planes.shape
    for i in numba.prange(count):
        half = np.zeros((rows, columns), planes.dtype)  # after rows
        back = np.zeros((rows, columns), planes.dtype)  # grad carried back over columns
        for k in range(weights_r.shape[1]):
            shift, weight = offset_r[i] + k, weights_r[i, k]
            for r in range(max(0, shift), min(rows, rows + shift)):
                for c in range(columns):
                    half[r, c] += weight * planes[i, r - shift, c]
        for k in range(weights_c.shape[1]):
            shift, weight = offset_c[i] + k, weights_c[i, k]
            low, high = max(0, shift), min(columns, columns + shift)
            total = 0.0
            for r in range(rows):
                for c in range(low, high):
                    total += grad[i, r, c] * half[r, c - shift]
                    back[r, c - shift] += weight * grad[i, r, c]
            grad_c[i, k] = total
        for k in range(weights_r.shape[1]):
            shift = offset_r[i] + k
            total = 0.0
            for r in range(max(0, shift), min(rows, rows + shift)):
                for c in range(columns):
                    total += back[r, c] * planes[i, r - shift, c]
            grad_r[i, k] = total


class _ShiftPlanes(torch.autograd.Function):
    @staticmethod
    def forward(ctx: Any, planes, offset_r, offset_c, weights_r, weights_c):
        ctx.save_for_backward(planes, offset_r, offset_c, weights_r, weights_c)
        out = torch.zeros_like(planes)
        taps = (offset_r.numpy(), offset_c.numpy(), weights_r.numpy(), weights_c.numpy())
        _shift_planes(planes.numpy(), *taps, 1, out.numpy())
        return out

    @staticmethod
    @once_differentiable
    def backward(ctx: Any, grad: Tensor):
        planes, offset_r, offset_c, weights_r, weights_c = ctx.saved_tensors
        grad = grad.contiguous()
        taps = (offset_r.numpy(), offset_c.numpy(), weights_r.numpy(), weights_c.numpy())
        grad_planes = None
        if ctx.needs_input_grad[0]:
            grad_planes = torch.zeros_like(planes)
            _shift_planes(grad.numpy(), *taps, -1, grad_planes.numpy())
        grad_r, grad_c = torch.zeros_like(weights_r), torch.zeros_like(weights_c)
        _weight_gradients(planes.numpy(), grad.numpy(), *taps, grad_r.numpy(), grad_c.numpy())
        return grad_planes, None, None, grad_r, grad_c


def shift_planes(
    planes: Tensor, offset_r: Tensor, offset_c: Tensor, weights_r: Tensor, weights_c: Tensor
) -> Tensor:
    """Shift each plane along rows and columns; what leaves the plane is lost.

    Args:
        planes: [i r c].
        offset_r, offset_c: [i] int64, shift of the first tap.
        weights_r, weights_c: [i k] weight of taps at offset, offset + 1, ...

    Returns:
        [i r c].
    """
    return _ShiftPlanes.apply(
        planes.contiguous(), offset_r, offset_c, weights_r.contiguous(), weights_c.contiguous()
    )


@numba.njit(cache=True, parallel=True)
def clear_paths(live, shift_r, shift_c):
    """[i r c] whether the straight way into each cell, back along the mean shift [i] in cells, stays on
    live cells: a long step must not jump a wall."""
    rows, columns = live.shape
    out = np.zeros((len(shift_r), rows, columns), np.bool_)
    for i in numba.prange(len(shift_r)):
        longest = max(abs(shift_r[i]), abs(shift_c[i]))
        for r in range(rows):
            for c in range(columns):
                clear = live[r, c]
                # every cell up to the nearer of the two taps: what comes from the farther one passes it
                for step in range(1, int(longest) + 1):
                    if clear:
                        back_r = r - int(np.rint(shift_r[i] * step / longest))
                        back_c = c - int(np.rint(shift_c[i] * step / longest))
                        inside = 0 <= back_r < rows and 0 <= back_c < columns
                        clear = inside and live[back_r, back_c]
                out[i, r, c] = clear
    return out

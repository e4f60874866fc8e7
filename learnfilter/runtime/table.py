"""What the plan answers at every cell, kept by frequency along the ring.

Scoring a strip under all headings is a correlation along the ring, and a correlation is a product of
spectra (Oppenheim and Schafer 2010, ch. 8).  Kept so, one pass over the table serves all headings, where
turning the strip would multiply every number once a look.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float32]
Cells = slice | NDArray[np.int64]

BLOCK = 512  # cells whose features are computed at once: more needs memory, fewer is slower
STRETCH = 2048  # cells multiplied at once, so that they are read from memory once for both parts of a number
SAMPLE = 256  # cells that the scales of small numbers are taken from
HEADROOM = 1.25  # beyond the largest number of the sample
STEPS = 127


class RingTable:
    """Features [n p channels] of rings, computed when a cell is first asked for.

    Memory is claimed at once and never grows.

    Args:
        features: block of cells -> [k p channels].
        count: n, cells.
        bearings: p.
        channels: of the features.
        looks: the strip is scored at this many turns, evenly over the ring.
        small: keep 8 bits a number instead of 32.
    """

    def __init__(
        self,
        features: Callable[[slice], Floats],
        count: int,
        bearings: int,
        channels: int,
        looks: int,
        small: bool = False,
    ):
        self._features, self._bearings = features, bearings
        frequencies = bearings // 2 + 1
        self._values = np.empty((frequencies, count, 2 * channels), np.int8 if small else np.float32)
        self._known = np.zeros(-(-count // BLOCK), bool)
        self._back = _inverse(bearings, looks)
        self._scale = self._sampled(count) if small else np.ones((frequencies, 2 * channels), np.float32)

    @property
    def values(self) -> NDArray[Any]:
        """[frequencies n 2*channels] the table as it is kept; what has not been asked for is undefined."""
        return self._values

    def scores(self, asked: Floats, cells: Cells) -> Floats:
        """[looks k] sum over bearings and channels of what a strip asks times what the rings answer.

        Args:
            asked: [p channels] of the strip, laid on the ring at look zero.
            cells: which.
        """
        self._know(cells)
        spectrum = np.fft.rfft(asked, axis=0).astype(np.complex64)
        real = spectrum.view(np.float32) * self._scale
        imaginary = (1j * spectrum).view(np.float32) * self._scale
        count = self._values.shape[1] if isinstance(cells, slice) else len(cells)
        product = np.empty((len(self._values), 2, count), np.float32)
        for rows, a, b, out in zip(self._values, real, imaginary, product, strict=True):
            for begin in range(0, count, STRETCH):
                part = slice(begin, begin + STRETCH)
                chosen = rows[part] if isinstance(cells, slice) else rows[cells[part]]
                stretch = chosen.astype(np.float32, copy=False)
                np.matmul(stretch, a, out=out[0, part])
                np.matmul(stretch, b, out=out[1, part])
        return self._back @ product.reshape(len(self._back.T), -1)

    def _know(self, cells: Cells) -> None:
        """Compute what has not been asked for before."""
        if self._known.all():
            return
        blocks = np.arange(len(self._known)) if isinstance(cells, slice) else np.unique(cells // BLOCK)
        for block in blocks[~self._known[blocks]]:
            part = slice(block * BLOCK, (block + 1) * BLOCK)
            values = self._spectra(part)
            if self._values.dtype == np.int8:
                values = np.rint(values / self._scale[:, None]).clip(-STEPS, STEPS)
            self._values[:, part] = values
            self._known[block] = True

    def _spectra(self, part: slice) -> Floats:
        """[frequencies k 2*channels] real and imaginary parts side by side."""
        spectra = np.fft.rfft(self._features(part), axis=1).astype(np.complex64)
        return np.ascontiguousarray(spectra.transpose(1, 0, 2)).view(np.float32)

    def _sampled(self, count: int) -> Floats:
        """[frequencies 2*channels] step of the 8-bit numbers."""
        every = max(1, count // SAMPLE)
        largest = np.max(
            [np.abs(self._spectra(slice(cell, cell + 1))).max(axis=1) for cell in range(0, count, every)],
            axis=0,
        )
        return (np.maximum(largest, 1e-12) * (HEADROOM / STEPS)).astype(np.float32)


def _inverse(bearings: int, looks: int) -> Floats:
    """[looks 2*frequencies] what turns real and imaginary parts of a correlation's spectrum back into it."""
    frequency = np.arange(bearings // 2 + 1)
    both = np.where((frequency == 0) | (2 * frequency == bearings), 1.0, 2.0)  # and its conjugate twin
    angle = 2 * np.pi * np.outer(np.arange(looks) / looks, frequency)
    back = np.stack([both * np.cos(angle), -both * np.sin(angle)], axis=-1) / bearings
    return back.reshape(looks, -1).astype(np.float32)

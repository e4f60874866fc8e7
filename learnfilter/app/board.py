"""TensorBoard: curves and belief pictures of a run."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType

import numpy as np
from numpy.typing import NDArray
from torch.utils.tensorboard import SummaryWriter

from learnfilter.render.site import Site
from learnfilter.report import belief_image


class Board:
    """Writes what training logs; a context manager, so that events are flushed.

    Args:
        folder: for event files.
        site: whose beliefs are shown.
    """

    def __init__(self, folder: Path, site: Site):
        self._writer, self._site = SummaryWriter(str(folder)), site

    def __enter__(self) -> Board:
        return self

    def __exit__(self, kind: type | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self._writer.close()

    def scalar(self, tag: str, value: float, iteration: int) -> None:
        """One point of a curve."""
        self._writer.add_scalar(tag, value, iteration)

    def belief(self, tag: str, plane: NDArray, iteration: int) -> None:
        """A belief summed over headings, [r c], on the board's site."""
        headings = self._site.grid.headings
        with np.errstate(divide="ignore"):
            log_belief = np.broadcast_to(np.log(plane / headings), (headings, *plane.shape))
        image = belief_image(self._site, log_belief)
        self._writer.add_image(tag, image, iteration, dataformats="HWC")

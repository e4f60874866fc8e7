"""The one contract: (strip, site) -> log-likelihood of every live pose.

Axes: b strips, w strip positions, n live cells, p ring bearings, h headings, c linear RGB.
A model gives log p(strip | pose) up to a constant a strip, in nats; the filter adds it up and cannot
know which model made it.  Where the plan knows nothing a model gives exactly its background, so
that the evidence there is zero.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
import torch
from torch import Tensor, nn

from learnfilter.core.strip import RingLayout
from learnfilter.render.site import Site


class Strips(NamedTuple):
    """Strips laid on ring bearings.

    Attributes:
        depth_m: [b w] range along the bearing; NaN where nothing came back.
        rgb: [b w 3] linear RGB; NaN where there is none (a sensor without colour: all NaN).
        present: [w] whether a raw column serves the position at all.
    """

    depth_m: Tensor
    rgb: Tensor
    present: Tensor

    def at(self, index: Any) -> Strips:
        """Some of the strips, by anything that indexes the first axis."""
        return Strips(self.depth_m[index], self.rgb[index], self.present)

    def without_colour(self) -> Strips:
        """The same strips from a sensor that sees no colour."""
        return self._replace(rgb=torch.full_like(self.rgb, torch.nan))


class SiteTensors(NamedTuple):
    """What a site predicts, as tensors, for some or all of its live cells.

    Attributes:
        range_m: [n p], inf where nothing is within reach.
        unsure: [n p] bool, no range evidence.
        finish: [n p] int64 into palette; the last entry of palette is 'unknown'.
        palette: [f 3] linear RGB, last row zero.
    """

    range_m: Tensor
    unsure: Tensor
    finish: Tensor
    palette: Tensor

    def cells(self, index: Tensor) -> SiteTensors:
        """The same for the live cells in `index` [m]."""
        return SiteTensors(self.range_m[index], self.unsure[index], self.finish[index], self.palette)


def site_tensors(site: Site) -> SiteTensors:
    """A site's rings as tensors; an unknown finish becomes the palette's last row."""
    palette = np.vstack([site.palette.reshape(-1, 3), np.zeros((1, 3))]).astype(np.float32)
    finish = np.where(site.finish < 0, len(palette) - 1, site.finish).astype(np.int64)
    return SiteTensors(
        torch.from_numpy(np.ascontiguousarray(site.range_m, dtype=np.float32)),
        torch.from_numpy(np.ascontiguousarray(site.unsure)),
        torch.from_numpy(finish),
        torch.from_numpy(palette),
    )


def pool_looks(scores: Tensor, layout: RingLayout) -> Tensor:
    """[b n h] log of the mean likelihood over the looks of each heading bin.

    A robot stands anywhere in a bin, so the bin's likelihood is a mean over headings; scoring the centre
    alone calls a robot at the bin's edge a liar.  Looks lie a quarter of a bin to either side of each
    centre; between looks the likelihood is taken to be linear, which makes the mean over a bin 7/16 of
    either own look and 1/16 of the next ones.
    """
    if layout.looks == 1:
        return scores
    near, far = math.log(7 / 16), math.log(1 / 16)
    # bin h owns looks 2 h - 1 and 2 h; those beside are 2 h - 2 and 2 h + 1
    own = torch.logaddexp(scores[..., 0::2], scores.roll(1, -1)[..., 0::2]) + near
    beside = torch.logaddexp(scores.roll(2, -1)[..., 0::2], scores.roll(-1, -1)[..., 0::2]) + far
    return torch.logaddexp(own, beside)


class ObservationModel(nn.Module):
    """Base of every observation model.

    `read` does what depends on the plan alone, once a site; `scores` does the rest at every look
    (`RingLayout.finer`); `log_likelihood` averages the looks of a bin.
    """

    layout: RingLayout

    def read(self, site: Site) -> Any:
        """Features of a site, to be handed back to `log_likelihood`."""
        raise NotImplementedError

    def scores(self, strips: Strips, features: Any) -> Tensor:
        """[b n looks*h] nats, for every live cell and look, up to a constant a strip."""
        raise NotImplementedError

    def log_likelihood(self, strips: Strips, features: Any) -> Tensor:
        """[b n h] nats, for every live cell and heading bin, up to a constant a strip."""
        return pool_looks(self.scores(strips, features), self.layout)

    def forward(self, strips: Strips, site: Site) -> Tensor:
        return self.log_likelihood(strips, self.read(site))

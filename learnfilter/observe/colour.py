"""Colour model: how well a column's linear RGB agrees with the finish the plan names there.

With x the logarithm of the measured linear RGB, y of the finish's, and k a Gaussian kernel of their
distance, p(x | y) = p0(x) exp(weight k(x, y)) / Z(y): the background p0 tilted towards the finish.
The evidence weight k - log Z is bounded, so one coloured thing that the plan lacks cannot outvote a
strip, and it is zero for an unknown finish.  Exponential tilting: Efron and Tibshirani (1996);
the choice of kernel and of logarithms (light acts by multiplying) is ours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from torch import Tensor

from learnfilter.core.strip import RingLayout
from learnfilter.observe.contract import ObservationModel, Strips, site_tensors
from learnfilter.observe.fitting import Pairs
from learnfilter.observe.lookup import ring_steps, smallest_integer, sum_along_rings
from learnfilter.render.site import Site

DARK = 0.02  # added before the logarithm: below this a camera's noise hides the colour


@dataclass(frozen=True)
class ColourFit:
    """Parameters of the colour model.

    Attributes:
        spread: width of the kernel, in log units.
        weight: nats that a perfect agreement is worth before the normaliser.
        level_power: how much of a strip's own brightness is taken out of it, 0 to 1.
        level: mean log brightness the model refers to.
        background: [k 3] sample of log colours that p0 stands for.
    """

    spread: float
    weight: float
    level_power: float
    level: float
    background: NDArray[np.float64]


def log_colour(rgb: NDArray) -> NDArray[np.float64]:
    """Logarithm of linear RGB, kept finite in the dark; NaN stays NaN."""
    return np.log(np.maximum(rgb, 0.0) + DARK)


def kernel(x: NDArray, y: NDArray, spread: float) -> NDArray[np.float64]:
    """[... i j] Gaussian kernel between rows of x [... i 3] and y [j 3]; NaN rows give 0."""
    square = ((x[..., :, None, :] - y[..., None, :, :]) ** 2).sum(axis=-1)
    return np.nan_to_num(np.exp(-0.5 * square / spread**2), nan=0.0)


def log_normaliser(y: NDArray, fit: ColourFit) -> NDArray[np.float64]:
    """[j] log Z of each finish colour y [j 3] (log units) under the background sample."""
    k = kernel(fit.background, y, fit.spread)
    return np.log(np.exp(fit.weight * k).mean(axis=0))


def levelled(x: NDArray, fit_power: float, fit_level: float) -> NDArray[np.float64]:
    """Take a share of each strip's own brightness out of its log colours x [... w 3]."""
    seen = np.isfinite(x).all(axis=-1, keepdims=True)
    count = np.maximum(seen.sum(axis=(-2, -1), keepdims=True), 1)
    own = np.where(seen, x, 0.0).mean(axis=-1, keepdims=True).sum(axis=-2, keepdims=True) / count
    return x - fit_power * (own - fit_level)


def fit_colour(pairs: Pairs, rng: np.random.Generator, sample: int = 800) -> ColourFit | None:
    """Choose spread, weight and level power by likelihood; None where there is no colour to fit.

    Args:
        pairs: measured against expected; rows without either colour are ignored.
        rng: draws the background sample.
        sample: size of the background sample.
    """
    x_all = log_colour(pairs.rgb)
    usable = np.isfinite(x_all).all(axis=1)
    if not (usable & np.isfinite(pairs.finish_rgb).all(axis=1)).any():
        return None
    strips = pairs.strip[usable]
    x = x_all[usable]
    level = float(x.mean())
    totals = np.bincount(strips, weights=x.mean(axis=1))
    own = (totals / np.maximum(np.bincount(strips), 1))[strips]
    y = log_colour(pairs.finish_rgb[usable])
    known = np.isfinite(y).all(axis=1)
    colours, which = np.unique(y[known], axis=0, return_inverse=True)
    best: tuple[float, ColourFit] | None = None
    for power in (0.0, 0.5, 1.0):
        levelled_x = x - power * (own - level)[:, None]
        background = rng.choice(levelled_x, size=min(sample, len(x)), replace=False)
        for spread in (0.2, 0.35, 0.5, 0.8, 1.2):
            k = np.exp(-0.5 * ((levelled_x[known] - y[known]) ** 2).sum(axis=1) / spread**2)

            def loss(weight: float, k=k, power=power, spread=spread, background=background) -> float:
                fit = ColourFit(spread, weight, power, level, background)
                return float(-(weight * k - log_normaliser(colours, fit)[which]).mean())

            found = minimize_scalar(loss, bounds=(0.0, 12.0), method="bounded", options={"xatol": 1e-2})
            if best is None or found.fun < best[0]:
                best = (found.fun, ColourFit(spread, float(found.x), power, level, background))
    assert best is not None
    return best[1]


class ColourModel(ObservationModel):
    """Independent columns; each colour by the tilted background."""

    def __init__(self, layout: RingLayout, fit: ColourFit):
        super().__init__()
        self.layout, self.fit = layout, fit

    def read(self, site: Site) -> tuple[NDArray, NDArray]:
        tensors = site_tensors(site)
        colours = tensors.palette.numpy()[:-1]
        return smallest_integer(tensors.finish.numpy(), len(colours) + 1), log_colour(colours)

    def scores(self, strips: Strips, features: tuple[NDArray, NDArray]) -> Tensor:
        ring, colours = features
        rgb = np.where(strips.present.numpy()[:, None], strips.rgb.numpy(), np.nan)
        x = levelled(log_colour(rgb), self.fit.level_power, self.fit.level)
        evidence = self.fit.weight * kernel(x, colours, self.fit.spread) - log_normaliser(colours, self.fit)
        seen = np.isfinite(x).all(axis=-1, keepdims=True)
        evidence = np.where(seen, evidence, 0.0)
        table = np.concatenate([evidence, np.zeros((*evidence.shape[:2], 1))], axis=-1)
        out = sum_along_rings(np.ascontiguousarray(table, np.float32), ring, *ring_steps(self.layout))
        return torch.from_numpy(out)

"""Bayes' rule over a lattice with cells skipped, as it is written down and nothing else."""

import numpy as np
from scipy.ndimage import binary_dilation, convolve

from learnfilter.runtime.bundle import Weighing

# a likelihood that is linear between centres, averaged over the cell, on either axis
OVER_CELL = np.outer([1 / 8, 3 / 4, 1 / 8], [1 / 8, 3 / 4, 1 / 8])


def bayes(
    predicted: np.ndarray, nats: np.ndarray, live: np.ndarray, weighing: Weighing
) -> tuple[np.ndarray, float, bool]:
    """Belief [h r c], log evidence and whether cells were skipped.

    Args:
        predicted: [h r c] before the strip.
        nats: [h r c] at the centres of cells.
        live: [r c].
        weighing: floor and the rule's settings.
    """
    count, poses = live.sum(), live.sum() * len(predicted)
    prior = (predicted * (1 - weighing.floor) + weighing.floor / poses) * live

    def conditioned(known: np.ndarray) -> tuple[np.ndarray, float]:
        share = convolve(known.astype(float), OVER_CELL, mode="constant")
        planes = [convolve(np.where(known, np.exp(plane), 0), OVER_CELL, mode="constant") for plane in nats]
        weights = prior * known * np.stack(planes) / np.where(known, share, 1)
        return weights / weights.sum(), np.log(weights.sum())

    active = predicted.sum(axis=0) >= weighing.skip_below / count
    active = live & binary_dilation(active, np.ones((3, 3)))  # and the eight cells beside each
    skipped = 1 - prior[:, active].sum()
    if 0 < 2 * active.sum() <= count:
        belief, log_evidence = conditioned(active)
        if log_evidence >= np.log(skipped * weighing.skip_ratio):
            return belief, log_evidence, True
    return *conditioned(live), False

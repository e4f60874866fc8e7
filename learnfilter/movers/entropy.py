"""How much looking is expected to tell, exactly, over a handful of places; nats.

The reference of a gain is the belief AFTER the move: then the gain is the mutual information of place and
view, never negative.  Against the belief before it, the gain minus what noisy motion spreads, moves may
rank differently: `LeastEntropy` wants the surest belief in the end, so it compares what is left.

Source: Cover and Thomas 2006, ch. 2 (conditional entropy, mutual information); Thrun, Burgard, Fox 2005,
ch. 17 (greedy choice between gain and cost).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from learnfilter.core.estimate import entropy
from learnfilter.core.shapes import check

TIE = 1e-6  # nats; float32 beliefs tell no finer


def expected_entropy(belief: ArrayLike, likelihood: ArrayLike) -> float:
    """Entropy that is expected to be left after looking once, H(X | Z).

    Args:
        belief: [x] probabilities of places, after the move.
        likelihood: [z x] p(view | place); every column sums to one.

    Raises:
        ShapeError: they differ in places.
    """
    belief, likelihood = np.asarray(belief, dtype=float), np.asarray(likelihood, dtype=float)
    check("likelihood", likelihood, "z x", **check("belief", belief, "x"))
    joint = belief * likelihood
    return entropy(joint) - entropy(joint.sum(axis=1))


def information_gain(belief: ArrayLike, likelihood: ArrayLike) -> float:
    """Entropy that looking once is expected to remove, I(X; Z); arguments as `expected_entropy`."""
    return entropy(np.asarray(belief, dtype=float)) - expected_entropy(belief, likelihood)


def greedy(gain: ArrayLike, cost: ArrayLike, rng: np.random.Generator) -> int:
    """The move with the most gain less cost, in one currency; drawn among those within TIE of it.

    Args:
        gain, cost: [m] of each move; a gain of -inf forbids one.
        rng: breaks ties.
    """
    worth = np.asarray(gain, dtype=float) - np.asarray(cost, dtype=float)
    return int(rng.choice(np.flatnonzero(worth >= worth.max() - TIE)))

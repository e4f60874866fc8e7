"""The learned mover as the robot runs it: one score for every motion.

Our own design.  Each pair of a mode of the belief and a motion is embedded on its own; a motion
is scored by the mean of its embeddings over the modes, weighted by belief, and by their variance: it is
large where modes promise different views, which is what tells them apart.  Nothing depends on the
order of the modes, on their number, on the set of motions or on the size of the map.

`movers/policy.py` trains it, and a change there must come here; a test holds both together.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.outlook import VIEW, Outlook

Floats = NDArray[np.float32]

MODE_FACTS = VIEW + 4 + 1  # view, place, share
MODE_WIDTH = 16
MOTION_FACTS = 2 * MODE_WIDTH + 4 + 4 + 2 + VIEW  # mean, variance; motion, last motion; entropy, share; seen
MOTION_WIDTH = 32
FAR_M = 5.0  # places farther off than a few times this are alike: elsewhere
# name, inputs, outputs, what follows
LAYERS = (
    ("mode_in", MODE_FACTS, MODE_WIDTH, "relu"),
    ("mode_out", MODE_WIDTH, MODE_WIDTH, "none"),
    ("motion_in", MOTION_FACTS, MOTION_WIDTH, "relu"),
    ("motion_out", MOTION_WIDTH, 1, "none"),
)


class RobotPolicy:
    """Scores motions with weights from training.

    Args:
        arrays: of each of LAYERS `.weight` [outputs inputs] and `.bias` [outputs].

    Raises:
        BundleError: one is missing or has another shape.
    """

    def __init__(self, arrays: Arrays):
        layers = [_layer(arrays, name, outputs, inputs) for name, inputs, outputs, _ in LAYERS]
        self._mode_in, self._mode_out, self._motion_in, self._motion_out = layers

    def logits(self, outlook: Outlook, motions: NDArray[np.floating], last: NDArray[np.floating]) -> Floats:
        """Score of every motion; the softmax of them is how likely each is in training.

        Args:
            outlook: what is believed and seen, its views after `motions`.
            motions: [m 3] to choose among.
            last: [3] the motion before; zeros at the start.

        Returns:
            [m].
        """
        believed = outlook.share > 0
        share = outlook.share[believed]
        embedded = self._embed(outlook.view[believed], outlook.place[believed], share)
        weight = share / share.sum()
        flat = embedded.reshape(len(share), -1)
        mean = weight @ flat
        spread = weight @ (flat - mean) ** 2
        facts = np.empty((len(motions), MOTION_FACTS), np.float32)
        ends = np.cumsum([MODE_WIDTH, MODE_WIDTH, 4, 4, 2])
        each = mean.reshape(len(motions), -1), spread.reshape(len(motions), -1), _facts(motions), _facts(last)
        rest = (outlook.entropy, share.max()), outlook.seen
        for part, values in zip(np.split(facts, ends, axis=1), (*each, *rest), strict=True):
            part[:] = values
        hidden = np.maximum(facts @ self._motion_in[0] + self._motion_in[1], 0)
        return (hidden @ self._motion_out[0] + self._motion_out[1])[:, 0]

    def _embed(self, view: Floats, place: Floats, share: Floats) -> Floats:
        """[k m 16] of views [k m 32] from modes at places [k 4] with shares [k]."""
        inputs = np.empty((*view.shape[:2], MODE_FACTS), np.float32)
        inputs[..., :VIEW] = view
        inputs[..., VIEW : VIEW + 2] = np.tanh(place[:, None, :2] / np.float32(FAR_M))
        inputs[..., VIEW + 2 : VIEW + 4] = place[:, None, 2:]
        inputs[..., -1] = share[:, None]
        hidden = np.maximum(inputs @ self._mode_in[0] + self._mode_in[1], 0)
        return hidden @ self._mode_out[0] + self._mode_out[1]


def best(logits: Floats, clear: NDArray[np.bool_]) -> int:
    """The motion that the robot makes: of the clear ones [m] that with the highest score [m]."""
    return int(np.argmax(np.where(clear, logits, -np.inf)))


def _layer(arrays: Arrays, name: str, outputs: int, inputs: int) -> tuple[Floats, Floats]:
    """Weight [inputs outputs] and bias [outputs]."""
    weight = arrays.take(f"{name}.weight", outputs, inputs)
    return np.ascontiguousarray(weight.T), arrays.take(f"{name}.bias", outputs)


def _facts(motions: NDArray[np.floating]) -> Floats:
    """[... 4] of motions [... 3]: metres forward and left, cosine and sine of the turn."""
    turn = motions[..., 2:]
    return np.concatenate([motions[..., :2], np.cos(turn), np.sin(turn)], axis=-1).astype(np.float32)

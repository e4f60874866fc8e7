"""What the filter asks of a model: log p(strip | pose) of every live pose, up to a constant a strip."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any

import numpy as np

from learnfilter.core.strip import RingLayout
from learnfilter.runtime.layers import Floats
from learnfilter.runtime.site import RobotSite


class RobotModel(ABC):
    """Base of every model that the robot runs.

    Attributes:
        layout: how strips lie on rings.
    """

    layout: RingLayout

    @abstractmethod
    def read(self, site: RobotSite) -> Any:
        """Features of a site, to be handed back with every strip: what depends on the plan alone."""

    @abstractmethod
    def scores(self, depth_m: Floats, rgb: Floats, features: Any) -> Floats:
        """[n looks*h] nats of one strip at every look (`RingLayout.finer`); arguments as below."""

    def log_likelihood(self, depth_m: Floats, rgb: Floats, features: Any) -> Floats:
        """[n h] nats of one strip for every live cell and heading bin.

        Args:
            depth_m: [w] metres on the strip's ring bearings, NaN where nothing came back.
            rgb: [w 3] linear, NaN where there is none.
            features: from `read`.
        """
        return pool_looks(self.scores(depth_m, rgb, features), self.layout)


def pool_looks(scores: Floats, layout: RingLayout) -> Floats:
    """[n h] log of the mean likelihood over each bin: 7/16 of either own look, 1/16 of the next ones.

    Bin h owns looks 2 h - 1 and 2 h.
    """
    if layout.looks == 1:
        return scores
    near, far = np.float32(np.log(7 / 16)), np.float32(np.log(1 / 16))
    own = np.logaddexp(scores[:, 0::2], np.roll(scores, 1, axis=1)[:, 0::2]) + near
    beside = np.logaddexp(np.roll(scores, 2, axis=1)[:, 0::2], np.roll(scores, -1, axis=1)[:, 0::2]) + far
    return np.logaddexp(own, beside)

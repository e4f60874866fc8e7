"""What the filter asks of a model: p(strip | pose) of every live pose, up to a constant a strip."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any

import numpy as np

from learnfilter.core.strip import RingLayout
from learnfilter.runtime.layers import Floats
from learnfilter.runtime.site import RobotSite
from learnfilter.runtime.table import Cells

ALL = slice(None)


class RobotModel(ABC):
    """Base of every model that the robot runs.

    Attributes:
        layout: how strips lie on rings.
    """

    layout: RingLayout

    @abstractmethod
    def read(self, site: RobotSite, small: bool = False) -> Any:
        """Features of a site, to be handed back with every strip: what depends on the plan alone.

        Args:
            site: the plan.
            small: keep numbers in 8 bits where the model has that form.
        """

    @abstractmethod
    def scores(self, depth_m: Floats, rgb: Floats, features: Any, cells: Cells) -> Floats:
        """[looks*h k] nats of one strip at every look (`RingLayout.finer`); arguments as below."""

    def likelihood(
        self, depth_m: Floats, rgb: Floats, features: Any, cells: Cells = ALL
    ) -> tuple[Floats, float]:
        """Likelihood of one strip for some live cells and every heading bin.

        Args:
            depth_m: [w] metres on the strip's ring bearings, NaN where nothing came back.
            rgb: [w 3] linear, NaN where there is none.
            features: from `read`.
            cells: indices [k] into the site's cells; all of them by default.

        Returns:
            [h k] mean likelihood over each bin, in units of the largest of any look, and the nats of that.
        """
        scores = self.scores(depth_m, rgb, features, cells)
        peak = float(scores.max())
        return pool_looks(np.exp(scores - np.float32(peak)), self.layout), peak


def pool_looks(likelihood: Floats, layout: RingLayout) -> Floats:
    """[h k] mean over each bin of likelihoods [looks*h k]: 7/16 of either own look, 1/16 of the next ones.

    Bin h owns looks 2 h - 1 and 2 h.
    """
    if layout.looks == 1:
        return likelihood
    after, before = likelihood[0::2], likelihood[1::2]
    own, beside = np.roll(before, 1, axis=0), np.roll(after, 1, axis=0)
    own += after
    beside += before
    own *= np.float32(7 / 16)
    beside *= np.float32(1 / 16)
    own += beside
    return own

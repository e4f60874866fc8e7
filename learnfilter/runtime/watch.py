"""How surprising each strip is, and when surprises add up to an alarm.

A strip's log evidence is ranked among those of drives on which the plan was true: its p-value is uniform
while that goes on.  Each p-value is turned into a bet that pays one on average and much where p is small
(Vovk and Wang 2021, the mixture of p-to-e calibrators); the bets are added up as in the Shiryaev-Roberts
procedure, so that with independent p-values an alarm at `alarm` comes at most once in `alarm` strips on
average (Vovk et al. 2021, conformal tests for change points).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray


class Usual(NamedTuple):
    """Log evidence of strips on drives where the plan was true.

    Attributes:
        nats: increasing.
        share: [like nats] of strips with at most so much, above zero, increasing.
    """

    nats: NDArray[np.float64]
    share: NDArray[np.float64]

    @classmethod
    def of(cls, log_evidence: NDArray[np.floating], tail: int = 50, points: int = 200) -> Usual:
        """From the log evidence [n] of many strips: all of the `tail` lowest and `points` in all."""
        ordered, count = np.sort(log_evidence.astype(np.float64)), len(log_evidence)
        rank = np.unique(np.r_[: min(tail, count), np.linspace(0, count - 1, points).astype(int)])
        nats, first = np.unique(ordered[rank], return_index=True)
        return cls(nats, (rank[first] + 1.0) / (count + 1.0))

    def p_value(self, log_evidence: float) -> float:
        """Share of strips that are no less surprising than this one."""
        return float(np.interp(log_evidence, self.nats, self.share))


class Watch(NamedTuple):
    """Carried from strip to strip.

    Attributes:
        searching, locked: what strips usually are while the robot searches and while it is locked.
        alarm: the sum of bets at which an alarm is given.
        bets: the sum so far; zero after an alarm.
        p: of the last strip; NaN before the first.
        alarmed: whether the last strip gave an alarm.
    """

    searching: Usual
    locked: Usual
    alarm: float
    bets: float = 0.0
    p: float = math.nan
    alarmed: bool = False

    @classmethod
    def read(cls, said: Mapping[str, Any]) -> Watch:
        """From the manifest's member `watch`."""
        searching, locked = (
            Usual(np.array(said[name]["nats"]), np.array(said[name]["share"]))
            for name in ("searching", "locked")
        )
        return cls(searching, locked, said["alarm"])

    def after(self, log_evidence: float, locked: bool) -> Watch:
        """The watch after one more weighed strip.

        Args:
            log_evidence: nats of the strip given those before.
            locked: whether the robot was, before it.
        """
        p = (self.locked if locked else self.searching).p_value(log_evidence)
        bets = (1.0 + self.bets) * bet(p)
        alarmed = bets >= self.alarm
        return self._replace(bets=0.0 if alarmed else bets, p=p, alarmed=alarmed)


def bet(p: float) -> float:
    """What a p-value in (0, 1] pays: the integral over e in (0, 1) of e p^(e - 1), one on average."""
    if p > 1 - 1e-4:
        return 0.5  # its limit at one; the closed form is noise there
    log_p = math.log(p)
    return (1 - p + p * log_p) / (p * log_p**2)

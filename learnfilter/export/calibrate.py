"""What is usual on a site while the plan is true: the watch's tables and its alarm."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.drives.drive import Drive
from learnfilter.drives.metrics import located
from learnfilter.runtime.bundle import Bundle
from learnfilter.runtime.localizer import Localizer
from learnfilter.runtime.watch import Usual, Watch

LEAST_DRIVES = 20  # fewer say nothing about the hundredth strip that surprises most


class _Said(NamedTuple):
    """Of each weighed strip of a drive.

    Attributes:
        log_evidence: nats.
        locked: whether the robot was, before it.
        wrong: whether the estimate was known to be far from the reference pose: no false alarm then.
    """

    log_evidence: NDArray[np.float64]
    locked: NDArray[np.bool_]
    wrong: NDArray[np.bool_]


def calibrate(bundle: Bundle, drives: Sequence[Drive]) -> dict[str, Any]:
    """The manifest's member `watch`.

    The alarm is the largest sum of bets that any of the drives reaches, with tables from drives other than
    itself, while its estimate is right: of their strips none gives a false one.  Strips of a drive depend
    on one another, and a threshold that assumed otherwise would be passed too often.

    Args:
        bundle: to be watched; a watch that it has is left out.
        drives: on its site, where the plan is true; independent of one another.

    Raises:
        DriveError: too few drives.
    """
    if len(drives) < LEAST_DRIVES:
        raise DriveError("too few to calibrate by", expected=f"at least {LEAST_DRIVES}", got=len(drives))
    localizer = Localizer(replace(bundle, watch=None))
    said = [_listen(localizer, drive) for drive in drives]
    counts = localizer.counts
    halves = said[0::2], said[1::2]
    sums = [_largest(other, _watch(half)) for half, others in (halves, halves[::-1]) for other in others]
    whole, strips = _watch(said), sum(len(drive.locked) for drive in said)
    return {
        "searching": _plain(whole.searching),
        "locked": _plain(whole.locked),
        "alarm": max(float(max(sums)), 1.0),
        "drives": len(drives),
        "strips": strips,
        "rate_per_strip": 1.0 / (strips + 1),
        "gone_share": float(counts.gone.sum() / max(1, counts.gone.sum() + counts.met.sum())),
    }


def _listen(localizer: Localizer, drive: Drive) -> _Said:
    localizer.reset()
    rows, before = [], False
    for row in range(len(drive)):
        rgb = None if drive.rgb is None else drive.rgb[row]
        answer = localizer.step(drive.odometry[row], drive.depth_m[row], rgb)
        if answer.weighed:
            right = True if drive.reference is None else located(answer.pose, drive.reference[row])
            rows.append((answer.log_evidence, before, right == 0))
        before = answer.state == "locked"
    return _Said(*(np.array(column) for column in zip(*rows, strict=True)))


def _watch(said: Sequence[_Said]) -> Watch:
    nats = np.concatenate([drive.log_evidence for drive in said])
    locked = np.concatenate([drive.locked for drive in said])
    searching = Usual.of(nats[~locked])
    # where no drive ever locks, whatever a locked robot would see is judged as a searching one's
    return Watch(searching, Usual.of(nats[locked]) if locked.any() else searching, np.inf)


def _largest(said: _Said, watch: Watch) -> float:
    largest = 0.0
    for nats, locked, wrong in zip(*said, strict=True):
        watch = watch._replace(bets=0.0) if wrong else watch.after(float(nats), bool(locked))
        largest = max(largest, watch.bets)
    return largest


def _plain(usual: Usual) -> Mapping[str, list[float]]:
    return {"nats": usual.nats.tolist(), "share": usual.share.tolist()}

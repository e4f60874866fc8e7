"""One thing a check found."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

Severity = Literal["error", "warning", "note"]
SEVERITIES = get_args(Severity)  # the gravest first


@dataclass(frozen=True)
class Finding:
    """What is wrong, where, and what to do about it.

    Attributes:
        severity: error (the plan cannot serve), warning (it may mislead), note (good to know).
        what: short name for programs, for example "open_end".
        message: one sentence for people, with metres and feature numbers.
        where: (x_m, y_m) to look at, or None where it concerns the whole plan.
        advice: what to do.
    """

    severity: Severity
    what: str
    message: str
    where: tuple[float, float] | None
    advice: str

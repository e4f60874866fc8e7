"""One family of errors, a class per cause.

`InputError` and its children are the user's to mend: the command line prints them as one line and
exits with 2.  Everything else is our fault and exits with 1.
"""

from __future__ import annotations

from pathlib import Path


class LearnfilterError(Exception):
    """Base of every error this package raises on purpose."""


class InputError(LearnfilterError):
    """Something the user gave cannot be used: says where, what was expected and what came.

    Args:
        message: the fault in one sentence, without file or place.
        file: file (or setting) that holds the fault.
        place: where in it: a feature, a row, a column, a key.
        expected: what a good value looks like.
        got: what was found instead.
    """

    def __init__(
        self,
        message: str,
        *,
        file: str | Path | None = None,
        place: str | None = None,
        expected: str | None = None,
        got: object = None,
    ):
        self.message, self.file, self.place = message, file, place
        self.expected, self.got = expected, got
        super().__init__(self._text())

    def _text(self) -> str:
        where = ", ".join(str(part) for part in (self.file, self.place) if part is not None)
        text = f"{where}: {self.message}" if where else self.message
        if self.expected is None:
            return text if self.got is None else f"{text} ({self.got})"
        text += f"; expected {self.expected}"
        return text if self.got is None else f"{text}, got {self.got}"


class PlanError(InputError):
    """A floor plan cannot be read or cannot be used."""


class DriveError(InputError):
    """A drive table cannot be read or does not fit its strip."""


class BundleError(InputError):
    """A bundle is damaged, newer than this reader, or does not fit itself."""


class StepError(InputError):
    """What the robot handed to one filter step cannot be used."""


class ConfigError(InputError):
    """A setting is out of range or contradicts another."""


class ShapeError(LearnfilterError):
    """An array has the wrong rank or a size that contradicts another array's."""


class ImpossibleEvidence(LearnfilterError):
    """No live pose explains a strip: the belief would be zero everywhere."""

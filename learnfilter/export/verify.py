"""Which number of a port differs first, and by how much.

A port of the filter runs a bundle's `vectors.npz` and writes what it gives to a file of the same kind: any of
the fields of `FIELDS`, by the names and in the shapes that the vectors have.  A field's differences are in
its own unit and all are held to one tolerance, which therefore means millimetres, milliradians and
thousandths of a nat or of belief alike where it is 1e-3.  NaN agrees with NaN alone, infinity with the same
infinity.
"""

from __future__ import annotations

import zipfile
import zlib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import InputError
from learnfilter.core.poses import wrap
from learnfilter.export.reference import STATES

# By the precision of the bundle.  Of an int8 one our runtime keeps the site's features in 8 bits too, which
# the vectors do not: 0.06 standard deviations squared, 0.05 nats, total variation 0.03 on a small office.
WITHIN = {"fp32": 1e-3, "fp16": 1e-3, "int8": 0.1}
LEAST_SPREAD = 0.05  # metres or radians; below it a covariance is as good as any

Floats = NDArray[np.float64]


class Kind(NamedTuple):
    """How a field is compared.

    Attributes:
        unit: of its differences.
        apart: expected and found values [k ...] -> difference of each.
        summed: a row's difference is half their sum, a total variation, and not the largest.
    """

    unit: str
    apart: Callable[[Floats, Floats], Floats]
    summed: bool = False


class Difference(NamedTuple):
    """A row that is farther apart than allowed.

    Attributes:
        row: of the vectors.
        place: field, and in a field of several numbers the one that is farthest apart.
        expected, got: that number; of a state its name.
        apart: difference of the row in the field's unit.
    """

    row: int
    place: str
    expected: str
    got: str
    apart: float


class Comparison(NamedTuple):
    """What came out.

    Attributes:
        largest: difference of each field that was compared, in its unit.
        missing: fields that were not given.
        first: in the earliest row that differs, the first field of `FIELDS` that does; None if all agree.
    """

    largest: dict[str, float]
    missing: tuple[str, ...]
    first: Difference | None

    def plain(self) -> dict[str, Any]:
        """For a summary: `largest`, `missing` and `first`; a field that differs without bound has null."""
        first = None if self.first is None else {**self.first._asdict(), "apart": _number(self.first.apart)}
        largest = {name: _number(apart) for name, apart in self.largest.items()}
        return {"largest": largest, "missing": list(self.missing), "first": first}


def _apart(expected: Floats, got: Floats) -> Floats:
    with np.errstate(invalid="ignore"):
        apart = np.nan_to_num(np.abs(got - expected), nan=np.inf, posinf=np.inf)
    return np.where((got == expected) | (np.isnan(got) & np.isnan(expected)), 0.0, apart)


def _poses_apart(expected: Floats, got: Floats) -> Floats:
    """Metres, and radians the short way round."""
    apart = _apart(expected, got)
    finite = np.isfinite(apart[:, 2])
    apart[finite, 2] = np.abs(wrap(got[finite, 2] - expected[finite, 2]))
    return apart


def _covariances_apart(expected: Floats, got: Floats) -> Floats:
    """In units of the expected standard deviations, or of LEAST_SPREAD."""
    variance = np.diagonal(expected, axis1=1, axis2=2)
    spread = np.maximum(np.sqrt(np.maximum(variance, 0.0)), LEAST_SPREAD)
    return _apart(expected, got) / (spread[:, :, None] * spread[:, None, :])


def _otherwise(expected: Floats, got: Floats) -> Floats:
    """One where they differ: no tolerance allows that."""
    return (expected != got).astype(np.float64)


# In the order of cause and effect, so that the first to differ is the one to look into.
FIELDS: Mapping[str, Kind] = {
    "weighed": Kind("(1: other strips)", _otherwise),
    "log_evidence": Kind("nats", _apart),
    "belief": Kind("total variation", _apart, summed=True),
    "top_belief": Kind("total variation", _apart, summed=True),
    "mass": Kind("of the belief", _apart),
    "entropy": Kind("nats", _apart),
    "pose": Kind("m or rad", _poses_apart),
    "covariance": Kind("standard deviations squared", _covariances_apart),
    "state": Kind("(1: another)", _otherwise),
    "surprise": Kind("of the p-value", _apart),
}


def read_outputs(path: str | Path) -> dict[str, NDArray[Any]]:
    """The arrays of a port's file.

    Raises:
        InputError: it is no file of named arrays.
    """
    try:
        with Path(path).open("rb") as opened:
            arrays = np.load(opened, allow_pickle=False)
            if isinstance(arrays, np.ndarray):
                raise ValueError("one array without a name")
            return dict(arrays)
    except FileNotFoundError as error:
        raise InputError("cannot be read (no such file)", file=path) from error
    except (OSError, EOFError, ValueError, zipfile.BadZipFile, zlib.error) as error:
        expected = "an .npz file of plain arrays"
        raise InputError(f"unreadable arrays ({error})", file=path, expected=expected) from error


def verify(
    vectors: Mapping[str, NDArray[Any]],
    outputs: Mapping[str, NDArray[Any]],
    within: float,
    file: str | Path = "outputs",
) -> Comparison:
    """Hold a port's outputs to a bundle's vectors.

    Args:
        vectors: of the bundle, see `export/vectors.py`.
        outputs: any of the fields of `FIELDS`, shaped like the vectors'.
        within: allowed difference, in each field's unit; below one.
        file: for messages.

    Raises:
        InputError: a field is unknown, of another shape or not of numbers, or there is none.
    """
    _hold(vectors, outputs, file)
    steps = np.flatnonzero(vectors["weighed"])
    rows = {"belief": steps[vectors["belief_step"]], "top_belief": steps}
    largest: dict[str, float] = {}
    found: list[Difference] = []
    for name in (name for name in FIELDS if name in outputs):
        expected, got = (given[name].astype(np.float64) for given in (vectors, outputs))
        apart = FIELDS[name].apart(expected, got).reshape(len(expected), -1)
        by_row = apart.sum(axis=1) / 2 if FIELDS[name].summed else apart.max(axis=1)
        largest[name] = float(by_row.max())
        if (bad := np.flatnonzero(by_row > within)).size:
            worst = (bad[0], *np.unravel_index(apart[bad[0]].argmax(), expected.shape[1:]))
            row = int(rows[name][bad[0]] if name in rows else bad[0])
            place = name + (str([int(at) for at in worst[1:]]) if len(worst) > 1 else "")
            want, came = _shown(name, expected[worst]), _shown(name, got[worst])
            found.append(Difference(row, place, want, came, float(by_row[bad[0]])))
    missing = tuple(name for name in FIELDS if name not in outputs)
    return Comparison(largest, missing, min(found, key=lambda difference: difference.row, default=None))


def _hold(vectors: Mapping[str, NDArray[Any]], outputs: Mapping[str, NDArray[Any]], file: str | Path) -> None:
    """Refuse outputs that cannot be compared."""
    known = " or ".join(FIELDS)
    if not outputs:
        raise InputError("nothing to compare", file=file, expected=known)
    for name, values in outputs.items():
        if name not in FIELDS:
            raise InputError("unknown field", file=file, place=name, expected=known)
        if values.dtype.kind not in "biuf":
            raise InputError("not numbers", file=file, place=name, got=values.dtype)
        if values.shape != vectors[name].shape:
            expected = str(list(vectors[name].shape))
            raise InputError("wrong shape", file=file, place=name, expected=expected, got=list(values.shape))


def _number(apart: float) -> float | None:
    return apart if np.isfinite(apart) else None


def _shown(name: str, value: float) -> str:
    named = name == "state" and value in range(len(STATES))
    return STATES[int(value)] if named else f"{value:.9g}"

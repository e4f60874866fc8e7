"""Check a port of the filter: which step and field differs first, and by how much.

Let your port run the inputs in the bundle's vectors.npz, row by row, and write what it gives to an .npz file:
any of weighed, log_evidence, belief, top_belief, mass, entropy, pose, covariance, state and surprise, named
and shaped as in vectors.npz. Differences are in metres, radians, nats, shares of belief (of whole beliefs
half the sum of all) and, for covariances, expected standard deviations; one tolerance, `within`, holds for
all. Without outputs=FILE our own NumPy runtime is checked, and the run's folder gets its outputs.npz as an
example. The exit code is 2 where something differs.

Example:
  learnfilter verify bundle=runs/export/office/bundle outputs=port.npz
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

from learnfilter.app.runs import open_run
from learnfilter.app.verb_settings import VerifyConfig
from learnfilter.core.errors import InputError
from learnfilter.core.files import whole_file
from learnfilter.export.check import read_vectors, reproduced
from learnfilter.export.vectors import to_bytes
from learnfilter.export.verify import FIELDS, WITHIN, Comparison, read_outputs, verify
from learnfilter.runtime import load_bundle


def run(settings: VerifyConfig) -> dict[str, Any]:
    """Do the verb; returns the summary."""
    bundle = load_bundle(settings.bundle)
    within = settings.within or WITHIN[bundle.manifest["precision"]]
    given = None if settings.outputs is None else Path(settings.outputs)
    outputs = reproduced(bundle.folder) if given is None else read_outputs(given)
    default = bundle.folder if given is None else given
    name = settings.name or default.resolve().stem
    compared = verify(read_vectors(bundle.folder), outputs, within, given or "the NumPy runtime")
    folder = open_run("verify", name, settings, replace=True)
    if given is None:
        given = folder.path / "outputs.npz"
        with whole_file(given) as beside:
            beside.write_bytes(to_bytes(outputs))
        print(f"written: {given}, what our own runtime gives, as an example")
    _say(compared, within)
    summary = folder.finish({"within": within, **compared.plain()})
    if compared.first is not None:
        row, place, expected, got, apart = compared.first
        message = f"differs by {apart:.3g}, more than {within:g}"
        raise InputError(message, file=given, place=f"row {row}, {place}", expected=expected, got=got)
    return summary


def _say(compared: Comparison, within: float) -> None:
    """One line a field."""
    for name, largest in compared.largest.items():
        mark = "" if largest <= within else "  <- differs"
        print(f"{name:<13}at most {largest:.1e} {FIELDS[name].unit}{mark}")
    if compared.missing:
        print(f"not given, not compared: {', '.join(compared.missing)}")

"""Turn a trained filter into the bundle that a robot runs, with vectors to check it by."""

from learnfilter.export.bundle import Provenance, write_bundle
from learnfilter.export.check import against_torch, compare
from learnfilter.export.mover import ShippedMover
from learnfilter.export.reference import Filter

__all__ = ["Filter", "Provenance", "ShippedMover", "against_torch", "compare", "write_bundle"]

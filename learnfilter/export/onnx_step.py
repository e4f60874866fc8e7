"""One step of the filter as a graph: move the belief, weigh a strip where belief is, say what it explains."""

from __future__ import annotations

import numpy as np

from learnfilter.core.grid import PoseGrid
from learnfilter.export.onnx_graph import BOOL, F32, F64, Value
from learnfilter.runtime.bundle import Weighing
from learnfilter.runtime.cells import SIDE


class Lattice:
    """Poses as planes [h r c] and as live cells [h n].

    Args:
        cells: [n 2] row, column of each live cell.
        grid: the lattice.
    """

    def __init__(self, cells: Value, grid: PoseGrid):
        self.graph, self.grid, self.count = cells.graph, grid, cells.size(0)
        self._flat = (cells * np.array([grid.columns, 1])).sum(1)

    def on_cells(self, planes: Value) -> Value:
        """[h n] from [h r c]."""
        return planes.shaped(0, -1).gather(self._flat, axis=1)

    def on_planes(self, values: Value) -> Value:
        """[h r c] from [h n], zero elsewhere."""
        poses = self.graph.filled(0.0, values.dtype, self.grid.rows * self.grid.columns, values.size(0))
        placed = poses.op("ScatterND", self._flat.spread(1), values.moved(1, 0))
        return placed.moved(1, 0).shaped(-1, self.grid.rows, self.grid.columns)

    @property
    def live(self) -> Value:
        """[r c] whether a cell is live."""
        ones = self.graph.filled(1.0, F32, 1, self.count)
        return self.on_planes(ones).shaped(self.grid.rows, self.grid.columns) > 0.5

    def beside(self, values: Value) -> Value:
        """[h n]: each cell averaged with its neighbours, nothing where none is live (`runtime/cells.py`)."""
        line = np.array([SIDE, 1 - 2 * SIDE, SIDE], F32)
        planes = self.on_planes(values).spread(1)
        return self.on_cells(planes.op("Conv", np.outer(line, line)[None, None], pads=[1, 1, 1, 1]))


def weigh(
    predicted: Value, log_likelihood: Value, lattice: Lattice, weighing: Weighing, anew: Value
) -> tuple[Value, Value]:
    """Belief [h r c] conditioned on a strip, and its log evidence in nats.

    Cells of little belief, and not beside one of more, are skipped while the others explain the strip so
    much better than the skipped share could; otherwise, and where the search begins anew, every cell is
    weighed.

    Args:
        predicted: [h r c] belief before the strip.
        log_likelihood: [h n] at the centres of live cells.
        lattice: which cells.
        weighing: floor, and when cells are skipped.
        anew: [] bool, whether the robot was found to be lost.
    """
    believed = lattice.on_cells(predicted)
    poses = (lattice.count * lattice.grid.headings).cast(F64)
    restart = anew.graph.value(weighing.restart, F64)
    floor = anew.where(restart, weighing.floor)
    prior = believed * (1.0 - floor).cast(F32) + (floor / poses).cast(F32)
    held = believed.cast(F64).sum(0) >= weighing.skip_below / lattice.count.cast(F64)
    spoken = lattice.beside(held.cast(F32).spread(0)).shaped(-1) > 0.0
    some, log_some = _weighed(prior, log_likelihood, spoken, lattice)
    every, log_every = _weighed(
        prior, log_likelihood, lattice.graph.filled(True, BOOL, lattice.count), lattice
    )
    skipped = (1.0 - (prior.cast(F64) * spoken.cast(F64)).sum()).at_least(1e-30)
    few = lattice.count.cast(F64) >= spoken.cast(F64).sum() * 2.0
    enough = ~anew & few & (log_some >= (skipped * weighing.skip_ratio).log())
    belief = lattice.on_planes(enough.where(some, every))
    return belief, enough.where(log_some, log_every).cast(F32)


def _weighed(prior: Value, log_likelihood: Value, cells: Value, lattice: Lattice) -> tuple[Value, Value]:
    """Belief [h n] over some cells [n] alone, and the log evidence."""
    peak = cells.where(log_likelihood, -np.inf).max()
    at_centres = cells.where((log_likelihood - peak).exp(), 0.0)
    share = lattice.beside(cells.cast(F32).spread(0)).at_least(SIDE**2)
    weights = cells.where(prior * lattice.beside(at_centres) / share, 0.0).cast(F64)
    total = weights.sum()
    return (weights / total).cast(F32), total.log() + peak.cast(F64)

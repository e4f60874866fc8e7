"""`observe.onnx` and `step.onnx`: a bundle's filter for programs that run ONNX.

Both take a strip, as a robot measures it, and a site.  `depth_m` [w] float32 in the sensor's raw column
order, NaN where nothing came back; `rgb` [w 3] float32 sRGB in [0, 1], NaN where there is none (absent
without colour); of the site `range_m` [n p] float32, inf where nothing is within reach, `unsure` [n p]
bool, `finish` [n p] int64, -1 unknown, `palette` [f 3] float32 linear, and where the model reads distances
`field_m`, and `cells` [n 2] int64, row and column of each live cell.  Any number n of cells will do.

`observe.onnx` gives `log_likelihood` [h n], nats at the centres of cells.  `step.onnx` takes besides `cells`
in any case, `belief` [h r c] float32, `odometry` [3] float32, the sensor's motion since the last weighed
strip in its frame then, and `first` bool, true for the first strip of a drive, to which nothing moved,
and `anew` bool, true to weigh a strip again with the share `weighing.restart` of belief everywhere; it
gives `belief_after` [h r c] and `log_evidence` [] in nats, NaN where the model's numbers overflow.
Inputs are not checked: a robot's odometry and colours must be as the runtime's `Localizer.step` accepts them.
"""

from __future__ import annotations

from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.export.onnx_graph import BOOL, F32, Graph
from learnfilter.export.onnx_inputs import declare
from learnfilter.export.onnx_models import log_likelihood
from learnfilter.export.onnx_motion import predict
from learnfilter.export.onnx_step import Lattice, weigh
from learnfilter.runtime.bundle import WEIGHTS, Bundle
from learnfilter.runtime.site import reads_field

OBSERVE, STEP = "observe.onnx", "step.onnx"


def write_onnx(bundle: Bundle) -> dict[str, bytes]:
    """A bundle's observation model and its whole step as graphs.

    Args:
        bundle: from `load_bundle`; of its site only the lattice is built in.

    Returns:
        Name -> content of each file.  Its metadata holds `schema`, `weights_sha256` and `safety`.
    """
    return {OBSERVE: _observe(bundle), STEP: _step(bundle)}


def _observe(bundle: Bundle) -> bytes:
    graph, field = Graph(), reads_field(bundle.manifest["model"])
    nats = log_likelihood(declare(graph, bundle, cells=field, field=field), bundle.model)
    return graph.model({"log_likelihood": (nats, (bundle.site.grid.headings, "n"))}, _facts(bundle))


def _step(bundle: Bundle) -> bytes:
    graph, grid = Graph(), bundle.site.grid
    belief = graph.input("belief", F32, *grid.shape)
    odometry, first = graph.input("odometry", F32, 3), graph.input("first", BOOL)
    anew = graph.input("anew", BOOL)
    given = declare(graph, bundle, cells=True, field=reads_field(bundle.manifest["model"]))
    assert given.cells is not None
    lattice = Lattice(given.cells, grid)
    predicted = first.where(belief, predict(belief, odometry, lattice.live, grid, bundle.noise))
    after, log_evidence = weigh(
        predicted, log_likelihood(given, bundle.model), lattice, bundle.weighing, anew
    )
    outputs = {"belief_after": (after, grid.shape), "log_evidence": (log_evidence, ())}
    return graph.model(outputs, _facts(bundle))


def _facts(bundle: Bundle) -> dict[str, str]:
    return {
        "schema": str(bundle.manifest["schema"]),
        "weights_sha256": bundle.manifest["files"][WEIGHTS]["sha256"],
        "safety": SAFETY_NOTICE,
    }

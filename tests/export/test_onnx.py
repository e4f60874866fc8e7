"""The filter as ONNX graphs, run by ONNX Runtime, against the runtime and against plain statements."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import onnx
import onnxruntime
import pytest
import torch
from scipy.special import ndtr

from learnfilter.core.grid import PoseGrid
from learnfilter.core.notice import SAFETY_NOTICE
from learnfilter.core.poses import through_mount
from learnfilter.export import onnx_motion, write_bundle
from learnfilter.export.check import total_variation
from learnfilter.export.onnx_files import OBSERVE, STEP, write_onnx
from learnfilter.export.onnx_graph import BOOL, Graph, Value
from learnfilter.export.onnx_step import Lattice, weigh
from learnfilter.filtering.rollout import lay_strips
from learnfilter.observe.factors import RangeFactors
from learnfilter.observe.matcher import Birth, Matcher, MatcherShape
from learnfilter.runtime import load_bundle
from learnfilter.runtime.arrays import Arrays
from learnfilter.runtime.bundle import WEIGHTS, Bundle, Weighing
from learnfilter.runtime.models import build_model
from learnfilter.runtime.motion import MotionNoise, predict
from learnfilter.runtime.part import Part
from learnfilter.runtime.site import RobotSite
from learnfilter.runtime.weighing import Scale
from tests.oracles_weighing import bayes
from tests.shipping import KINDS, PROVENANCE, filter_of, model_of, rehearsed, rendered

NOISE = MotionNoise(0.1, 0.03, 0.1, 0.02)
MOTIONS = {
    "still": (0.0, 0.0, 0.0),
    "a part of a cell": (0.06, -0.04, 0.05),
    "half a cell": (0.125, 0.0, 0.0),
    "some cells": (-0.9, 0.35, 0.4),
    "turn right past a half": (0.05, 0.0, -3.1),
    "a long way through walls": (3.3, -0.4, 0.2),
    "out of the site": (11.0, 0.0, 0.0),
}


def engine(content: bytes) -> Callable[[dict[str, Any]], dict[str, np.ndarray]]:
    """A graph to be run: outputs by name, of the inputs that it asks for."""
    options = onnxruntime.SessionOptions()
    options.intra_op_num_threads = 1  # more would only spin against other tests
    session = onnxruntime.InferenceSession(content, options, providers=["CPUExecutionProvider"])
    wanted = [given.name for given in session.get_inputs()]
    names = [output.name for output in session.get_outputs()]

    def result(inputs: dict[str, Any]) -> dict[str, np.ndarray]:
        return dict(zip(names, session.run(names, {name: inputs[name] for name in wanted}), strict=True))

    return result


def run(content: bytes, inputs: dict[str, Any]) -> dict[str, np.ndarray]:
    """One run of a graph."""
    return engine(content)(inputs)


def site_inputs(site: RobotSite) -> dict[str, Any]:
    """A site as graphs take it."""
    names = ("cells", "range_m", "unsure", "palette", "field_m")
    return {**{name: getattr(site, name) for name in names}, "finish": site.finish.astype(np.int64)}


def without_some_cells(site: RobotSite) -> RobotSite:
    """The site with every third cell closed."""
    kept = np.arange(len(site.cells)) % 3 > 0
    rings = {name: getattr(site, name)[kept] for name in ("cells", "range_m", "unsure", "finish")}
    return replace(site, **rings)


def strip_inputs(row: int, missing: slice = slice(0)) -> dict[str, np.ndarray]:
    """A strip of the drive in raw column order, without some columns."""
    drive = rehearsed()[1]
    strip = {"depth_m": drive.depth_m[row], "rgb": drive.rgb[row]}
    strip = {name: values.astype(np.float32) for name, values in strip.items()}
    for values in strip.values():
        values[missing] = np.nan
    return strip


def laid(bundle: Bundle, strip: dict[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Depth [w] and linear colour [w 3] of a raw strip on ring bearings."""
    drive = rehearsed()[1]
    same = {name: np.broadcast_to(values, (len(drive), *values.shape)) for name, values in strip.items()}
    strips = lay_strips(replace(drive, **same), bundle.site.layout, np.array([0]))
    return strips.depth_m[0].numpy(), strips.rgb[0].numpy()


def expected_likelihood(bundle: Bundle, strip: dict[str, np.ndarray]) -> tuple[np.ndarray, float]:
    """What the runtime's model says of a raw strip, [h n] and the nats of its unit."""
    return bundle.model.likelihood(*laid(bundle, strip), bundle.model.read(bundle.site))


def whole(part: Part, bundle: Bundle) -> np.ndarray:
    """[h r c] the belief that a window of it stands for."""
    belief = np.zeros(bundle.site.grid.shape, np.float32)
    belief[:, *part.window] = part.planes
    return belief


STRIPS = {
    "whole": strip_inputs(0),
    "gaps": strip_inputs(7, slice(2, 9)),
    "all missing": strip_inputs(3, slice(None)),
}


@pytest.mark.parametrize("kind", KINDS)
def test_evidence_is_the_runtimes(shipped, kind):
    """Every pose gets the runtime's likelihood from a raw strip, on sites of any number of cells."""
    bundle = load_bundle(shipped(kind))
    content = write_onnx(bundle)[OBSERVE]
    for site in (bundle.site, without_some_cells(bundle.site)):
        for name, strip in STRIPS.items():
            expected, unit = expected_likelihood(replace(bundle, site=site), strip)
            found = run(content, {**site_inputs(site), **strip})["log_likelihood"]
            # float32 sums over 16 columns of a few nats
            np.testing.assert_allclose(np.exp(found - unit), expected, rtol=1e-4, atol=1e-9, err_msg=name)


@pytest.mark.parametrize("reading", [0.1, 6.5, np.inf])
def test_readings_out_of_range_are_none(shipped, reading):
    """The sensor measures from 0.15 to 6 m: anything else counts as nothing that came back."""
    bundle = load_bundle(shipped("matcher"))
    content, site = write_onnx(bundle)[OBSERVE], site_inputs(bundle.site)
    strip = strip_inputs(0)
    strip["depth_m"][6] = np.nan
    expected = run(content, {**site, **strip})["log_likelihood"]
    strip["depth_m"][6] = reading
    np.testing.assert_array_equal(run(content, {**site, **strip})["log_likelihood"], expected)


@pytest.mark.parametrize("kind", ["beam+colour", "matcher"])
def test_a_plan_without_finishes_goes_by_depth(shipped, kind):
    """No palette and no known finish: the runtime's likelihood again."""
    bundle = load_bundle(shipped(kind))
    finish, palette = np.full_like(bundle.site.finish, -1), np.zeros((0, 3), np.float32)
    plain = replace(bundle, site=replace(bundle.site, finish=finish, palette=palette))
    expected, unit = expected_likelihood(plain, STRIPS["whole"])
    found = run(write_onnx(plain)[OBSERVE], {**site_inputs(plain.site), **STRIPS["whole"]})
    # float32 sums, as above
    np.testing.assert_allclose(np.exp(found["log_likelihood"] - unit), expected, rtol=1e-4, atol=1e-9)


def test_a_sensor_without_colour_is_asked_for_none(tmp_path):
    """There is no input for colour, and no feature of it in the model: the runtime's likelihood again."""
    shipped, (first, second) = filter_of("matcher"), rendered()[1]
    coloured = model_of("matcher")
    ranges = RangeFactors(
        *(np.asarray(getattr(coloured, name)) for name in ("measured", "expected", "range_bias"))
    )
    birth = Birth(coloured.scale, ranges, None, 0.0, 1.0, 0.0, 0.0, 0.3, 1.0)
    model = Matcher(coloured.layout, birth, MatcherShape(), torch.Generator().manual_seed(0))
    grey = shipped._replace(model=model, strip=replace(shipped.strip, has_colour=False))
    drives = [replace(drive, strip=grey.strip, rgb=None) for drive in (first, second)]
    write_bundle(tmp_path / "bundle", grey, drives, PROVENANCE)
    bundle = load_bundle(tmp_path / "bundle")
    content = write_onnx(bundle)[OBSERVE]
    assert "rgb" not in [given.name for given in onnx.load_from_string(content).graph.input]
    strip = {"depth_m": STRIPS["whole"]["depth_m"]}
    without = {**strip, "rgb": np.full((len(strip["depth_m"]), 3), np.nan, np.float32)}
    expected, unit = expected_likelihood(bundle, without)
    found = run(content, {**site_inputs(bundle.site), **strip})["log_likelihood"]
    # float32 sums, as above
    np.testing.assert_allclose(np.exp(found - unit), expected, rtol=1e-4, atol=1e-9)


@pytest.mark.parametrize("kind", ["endpoint+colour", "matcher"])
def test_any_layout_will_do(shipped, kind):
    """Headings too fine for two looks, and positions that no column serves."""
    bundle = load_bundle(shipped(kind))
    site = bundle.site
    layout = replace(site.layout.every(2), bearings_per_heading=2)
    weights = (bundle.folder / WEIGHTS).read_bytes()
    model = build_model(layout, bundle.manifest["model"], Arrays.parse(bundle.folder / WEIGHTS, weights))
    grid = replace(site.grid, headings=2 * site.grid.headings)
    other = replace(bundle, model=model, site=replace(site, layout=layout, grid=grid))
    expected, unit = expected_likelihood(other, STRIPS["gaps"])
    found = run(write_onnx(other)[OBSERVE], {**site_inputs(site), **STRIPS["gaps"]})["log_likelihood"]
    # float32 sums, as above
    np.testing.assert_allclose(np.exp(found - unit), expected, rtol=1e-4, atol=1e-9)


def test_the_normal_distribution_is_double(graph_of):
    """The runtime's taps need more than float32 has, which is all the engine's erf gives."""
    u = np.concatenate([np.linspace(-9, 9, 2001), [-1e4, 1e4]])
    found = graph_of(lambda _, u: onnx_motion.normal_cdf(u), u=u)
    np.testing.assert_allclose(found, ndtr(u), rtol=1e-12, atol=1e-15)  # double, and the fit's 1e-14


def predicted(graph: Graph, belief: Value, odometry: Value, live: Value) -> Value:
    """The motion step alone, on the invented site."""
    return onnx_motion.predict(belief, odometry, live, rehearsed()[0].grid, NOISE)


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS)
def test_prediction_is_the_runtimes(graph_of, motion):
    """Every mass arrives where the runtime puts it."""
    site = rehearsed()[0]
    belief = np.random.default_rng(0).gamma(0.05, size=site.grid.shape) * site.live
    belief = (belief / belief.sum()).astype(np.float32)
    odometry = np.array(motion, np.float32)

    found = graph_of(predicted, belief=belief, odometry=odometry, live=site.live).reshape(belief.shape)
    part = predict(Part(belief, 0, 0), odometry, site.grid, site.live, NOISE)
    expected = np.zeros_like(belief)
    expected[:, *part.window] = part.planes
    assert total_variation(found, expected) < 1e-6  # float32 sums in another order


def test_what_is_lost_in_walls_starts_anew(graph_of):
    """One pose that drives out of the site: every live pose is as likely as another."""
    site = rehearsed()[0]
    lone = np.zeros(site.grid.shape, np.float32)
    lone[0, site.cells[0, 0], site.cells[0, 1]] = 1.0

    odometry = np.array([-9.0, 0, 0], np.float32)
    found = graph_of(predicted, belief=lone, odometry=odometry, live=site.live).reshape(lone.shape)
    expected = np.broadcast_to(site.live / (site.live.sum() * site.grid.headings), found.shape)
    np.testing.assert_allclose(found, expected, rtol=1e-5)  # float32


GRID = PoseGrid(4, 6, 7, 0.25, 0.0, 0.0)
WEIGHING = Weighing(0.4, 0.4, 1e-3, skip_below=1e-2, skip_ratio=100.0)
SETTLED = {(1, 2): 0.6, (1, 3): 0.3, (2, 2): 0.1}


@pytest.mark.parametrize(
    ("where", "speaks_for", "skips"),
    [(SETTLED, (1, 2), True), (SETTLED, (4, 5), False), ({}, (1, 2), False)],
    ids=["settled and right", "settled and wrong", "anywhere"],
)
def test_cells_are_skipped_by_the_rule(graph_of, where, speaks_for, skips):
    """Only while the strip speaks for the cells that are believed in."""
    rng = np.random.default_rng(1)
    live = np.ones(GRID.shape[1:], bool)
    live[3, 1:4] = live[0, 0] = False
    predicted = np.zeros(GRID.shape)
    for cell, mass in where.items():
        predicted[:, *cell] = mass / GRID.headings
    if not where:
        predicted[:] = live / (live.sum() * GRID.headings)
    nats = rng.normal(-9.0, 1.0, GRID.shape)
    nats[:, *speaks_for] += 12.0
    expected, log_evidence, skipped = bayes(predicted, nats, live, WEIGHING)
    assert skipped == skips
    cells = np.argwhere(live)

    def weighed(graph: Graph, predicted: Value, nats: Value, cells: Value) -> Value:
        belief, log_evidence = weigh(
            predicted, nats, Lattice(cells, GRID), WEIGHING, graph.value(False, BOOL)
        )
        return graph.joined([belief.shaped(-1), log_evidence.shaped(1)], 0)

    on_cells = nats[:, cells[:, 0], cells[:, 1]].astype(np.float32)
    found = graph_of(weighed, predicted=predicted.astype(np.float32), nats=on_cells, cells=cells)
    # float32: a few roundings of each number
    np.testing.assert_allclose(found, [*expected.ravel(), log_evidence], rtol=1e-5, atol=1e-9)


@pytest.mark.parametrize("kind", KINDS)
def test_a_drive_ends_in_the_runtimes_belief(shipped, kind):
    """Thirty steps from an unknown start, with gaps and the robot carried off half way."""
    bundle = load_bundle(shipped(kind))
    drive, site, mount = rehearsed()[1], site_inputs(bundle.site), np.asarray(bundle.strip.mount)
    scale, step_on = Scale.of(bundle), engine(write_onnx(bundle)[STEP])
    part = scale.nowhere()
    belief = whole(part, bundle)
    for step, row in enumerate([*range(15), *range(90, 105)]):
        strip = strip_inputs(row, slice(None) if step == 9 else slice(step % 3))
        moved = through_mount(drive.odometry[row] * (step != 15), mount).astype(np.float32)
        state = {"belief": belief, "odometry": moved, "first": np.array(step == 0), "anew": np.array(False)}
        found = step_on({**site, **strip, **state})
        belief = found["belief_after"]
        if step > 0:
            part = predict(part, moved, bundle.site.grid, scale.live, bundle.noise)
        part, log_evidence = scale.weigh(part, *laid(bundle, strip))
        # what float32 leaves of a belief of 10,000 poses
        assert total_variation(belief, whole(part, bundle)) < 1e-5
        assert found["log_evidence"] == pytest.approx(log_evidence, abs=1e-4)


@pytest.mark.parametrize("kind", KINDS)
def test_files_are_small_and_say_what_they_are(shipped, kind):
    """Schema, weights and what the estimate may not be used for; no file of the kind is near 300 kB."""
    bundle = load_bundle(shipped(kind))
    for content in write_onnx(bundle).values():
        facts = {entry.key: entry.value for entry in onnx.load_from_string(content).metadata_props}
        assert facts == {
            "schema": str(bundle.manifest["schema"]),
            "weights_sha256": bundle.manifest["files"][WEIGHTS]["sha256"],
            "safety": SAFETY_NOTICE,
        }
        assert len(content) < 300_000


def test_the_same_bundle_gives_the_same_bytes(shipped):
    """Nothing of the moment gets into a file."""
    bundle = load_bundle(shipped("matcher"))
    assert write_onnx(bundle) == write_onnx(bundle)


@pytest.fixture
def graph_of() -> Callable[..., np.ndarray]:
    """Run one part of a graph on arrays; its numbers in one row."""

    def result(build: Callable[..., Value], **arrays: np.ndarray) -> np.ndarray:
        graph = Graph()
        given = {name: graph.input(name, array.dtype, *array.shape) for name, array in arrays.items()}
        content = graph.model({"out": (build(graph, *given.values()).shaped(-1), ["numbers"])}, {})
        return run(content, arrays)["out"]

    return result

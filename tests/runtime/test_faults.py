"""Whatever happens to a bundle or comes from a robot: a named error or an answer, never a broken belief."""

import json
import shutil
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from safetensors.numpy import load_file

from learnfilter.core.errors import BundleError, StepError
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.bundle import MANIFEST, SITE, VECTORS, WEIGHTS
from tests.shipping import STRIP, edit, rendered, rewrite

FILES = (MANIFEST, WEIGHTS, SITE, VECTORS, "observe.onnx", "step.onnx")


def fault(folder: Path) -> str:
    with pytest.raises(BundleError) as caught:
        load_bundle(folder)
    return str(caught.value)


# ---- bundles ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", FILES)
def test_a_file_cut_anywhere_is_named(bundle, name):
    """From nothing left to a byte short."""
    content = (bundle / name).read_bytes()
    for length in (0, 1, 7, 8, 9, len(content) // 3, len(content) - 2):
        (bundle / name).write_bytes(content[:length])
        assert f"{bundle / name}" in fault(bundle), length


@pytest.mark.parametrize("name", FILES)
def test_a_file_that_grew_is_named(bundle, name):
    """Bytes of another file at its end."""
    (bundle / name).write_bytes((bundle / name).read_bytes() + b"\0")
    assert f"{bundle / name}" in fault(bundle)


@pytest.mark.parametrize("name", FILES)
def test_a_bit_flipped_anywhere_is_named_or_means_nothing(bundle, name):
    """Any bit of any byte; a manifest may come to say the same in other characters (1e-05 and 1E-05)."""
    content, rng = (bundle / name).read_bytes(), np.random.default_rng(0)
    for at in [0, len(content) - 1, *rng.integers(0, len(content), 12)]:
        flipped = bytearray(content)
        flipped[at] ^= 1 << int(rng.integers(8))
        (bundle / name).write_bytes(flipped)
        if name == MANIFEST and _same_json(flipped, content):
            continue
        assert f"{bundle / name}" in fault(bundle), at


def _same_json(one: bytes, other: bytes) -> bool:
    try:
        return json.loads(one) == json.loads(other)
    except ValueError:
        return False


@pytest.mark.parametrize("name", FILES[1:])
def test_a_file_of_another_bundle_is_named(bundle, shipped, name):
    """Whole, and of the right kind, but not the one that the manifest vouches for."""
    shutil.copy(shipped("endpoint+colour") / name, bundle / name)
    assert f"{bundle / name}, " in fault(bundle)


def test_a_manifest_of_another_bundle_vouches_for_none_of_the_files(bundle, shipped):
    """The first file that it does not know is named."""
    shutil.copy(shipped("beam+colour") / MANIFEST, bundle / MANIFEST)
    assert ": damaged; expected " in fault(bundle)


def test_a_folder_in_the_place_of_a_file_is_named(bundle):
    """And one in the place of the bundle that holds none."""
    (bundle / SITE).unlink()
    (bundle / SITE).mkdir()
    assert f"{bundle / SITE}: cannot be read" in fault(bundle)
    assert f"{bundle / SITE / MANIFEST}: cannot be read" in fault(bundle / SITE)


@pytest.mark.parametrize("kind", ["matcher", "endpoint+colour"])
@pytest.mark.parametrize("file", [WEIGHTS, SITE])
def test_every_array_of_another_shape_is_refused(shipped, tmp_path, kind, file):
    """One more axis, with digests that agree: each array is held to its shape."""
    names = list(load_file(shipped(kind) / file))
    assert names
    for name in names:
        folder = Path(shutil.copytree(shipped(kind), tmp_path / name))
        rewrite(folder, file, lambda arrays, name=name: arrays.update({name: arrays[name][None].copy()}))
        assert f"{folder / file}, {name}: wrong shape" in fault(folder)


def test_every_array_a_row_short_is_refused(shipped, tmp_path):
    """Named, or named through the first array that it no longer fits; two may have any length."""
    free = {"background", "palette"}  # a sample, and finishes of which the rings may use fewer
    for file in (WEIGHTS, SITE):
        arrays = load_file(shipped("matcher") / file)
        for name in (name for name, array in arrays.items() if array.ndim and name not in free):
            folder = Path(shutil.copytree(shipped("matcher"), tmp_path / name))
            rewrite(folder, file, lambda arrays, name=name: arrays.update({name: arrays[name][:-1].copy()}))
            assert f"{folder / file}, " in fault(folder), name


@pytest.mark.parametrize("change", [{"rows": 3}, {"columns": 3}, {"headings": 8}, {"cell_m": 0.0}])
def test_a_grid_that_does_not_fit_the_files_is_refused(bundle, change):
    """Well-formed, sealed, and of another site."""
    edit(bundle, lambda manifest: manifest["grid"].update(change))
    assert str(bundle) in fault(bundle)


# ---- a plan that is not the one the robot drives on ------------------------------------------------------


@pytest.mark.parametrize("kind", ["beam+colour", "matcher"])
def test_on_another_site_the_robot_is_lost_most_of_the_time(shipped, kind):
    """What is promised: answers and no exception, a belief, and no false certainty that lasts."""
    localizer = Localizer(load_bundle(shipped(kind)))
    for drive in rendered("hall")[1]:
        localizer.reset()
        states: Counter[str] = Counter()
        for odometry, depth, rgb in zip(drive.odometry, drive.depth_m, drive.rgb, strict=True):
            answer = localizer.step(odometry, depth, rgb)
            states[answer.state] += answer.weighed
        hold(localizer, answer)
        # 0.82 and 0.1 at worst of two models and drives; on its own site it is lost for less than half
        assert states["lost"] > 0.7 * states.total() and states["locked"] < 0.2 * states.total()


# ---- steps -----------------------------------------------------------------------------------------------

WIDTH = STRIP.columns
NUMBER = st.floats(allow_nan=True, allow_infinity=True, width=32)
MOTION = st.one_of(
    st.tuples(st.floats(-2, 2), st.floats(-2, 2), st.floats(-6, 6)), st.tuples(NUMBER, NUMBER, NUMBER)
)
READING = st.one_of(st.just(float("nan")), st.floats(0, 8), NUMBER)
DEPTH = st.one_of(
    st.lists(st.one_of(st.just(float("nan")), st.floats(0, 8)), min_size=WIDTH, max_size=WIDTH),
    st.lists(READING, min_size=WIDTH - 1, max_size=WIDTH + 1),
)
COLOUR = st.one_of(st.none(), st.floats(-0.1, 1.1), st.just(float("nan")))
TIME = st.one_of(st.none(), st.floats(-5, 100), NUMBER)


def hold(localizer: Localizer, answer) -> None:
    """What is true after any step."""
    belief = localizer.belief
    assert np.isfinite(belief).all() and (belief >= 0).all()
    assert belief.sum(dtype=float) == pytest.approx(1.0, abs=1e-4)  # float32 shares of 12,000 poses
    assert answer.state in ("searching", "locked", "lost")
    assert np.isfinite(answer.pose).all() and np.isfinite(answer.covariance).all()
    assert np.isfinite([answer.mass, answer.entropy, answer.log_evidence]).all()
    assert 0 <= answer.mass <= 1 + 1e-4 and 0 < answer.surprise <= 1
    assert (np.linalg.eigvalsh(answer.covariance) > -1e-9).all()  # rounding of float64 sums


@pytest.fixture(scope="module", params=["beam+colour", "matcher"])
def localizer(request, shipped) -> Localizer:
    return Localizer(load_bundle(shipped(request.param)))


@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(steps=st.lists(st.tuples(MOTION, DEPTH, COLOUR, TIME), min_size=1, max_size=8))
def test_any_sequence_of_steps_leaves_a_belief(localizer, steps):
    """Good ones and bad ones: a StepError with the belief as it was, or an answer that holds together."""
    localizer.reset()
    for motion, depth, colour, time_s in steps:
        rgb = None if colour is None else np.full((WIDTH, 3), colour)
        before = localizer.belief
        try:
            answer = localizer.step(motion, depth, rgb, time_s)
        except StepError as error:
            assert error.place is not None
            np.testing.assert_array_equal(localizer.belief, before)
        else:
            hold(localizer, answer)


@settings(deadline=None, max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    jumps=st.lists(st.tuples(st.floats(-7, 7), st.floats(-7, 7), st.floats(-6, 6)), min_size=2, max_size=4),
    row=st.integers(0, 100),
)
def test_odometry_jumps_leave_a_belief(localizer, jumps, row):
    """As far as a leap is allowed, through walls and off the site, with strips of a real drive between."""
    drive = rendered()[1][0]
    localizer.reset()
    for jump in jumps:
        for motion in (jump, drive.odometry[row]):
            hold(localizer, localizer.step(motion, drive.depth_m[row], drive.rgb[row]))

"""The mover in a bundle: it proposes what was trained, and what does not fit is refused."""

import shutil
from pathlib import Path

import numpy as np
import pytest
import torch
from safetensors.numpy import load_file

from learnfilter.core.errors import BundleError, StepError
from learnfilter.export import ShippedMover, write_bundle
from learnfilter.movers.policy import Outlooks, PolicyNet
from learnfilter.runtime import Localizer, load_bundle, propose
from learnfilter.runtime.bundle import WEIGHTS
from learnfilter.runtime.moves import MOTIONS, Footprint, Motion, clear_motions
from tests.shipping import PROVENANCE, STRIP, edit, filter_of, rendered, rewrite

FOOTPRINT = Footprint(0.25, STRIP.mount)


@pytest.fixture(scope="module")
def net() -> PolicyNet:
    """Weights far from birth, so that it has opinions."""
    net, generator = PolicyNet(torch.Generator().manual_seed(0)), torch.Generator().manual_seed(1)
    with torch.no_grad():
        for parameter in net.parameters():
            parameter.normal_(0.0, 0.3, generator=generator)
    return net


@pytest.fixture(scope="module", params=["fp32", "int8"])
def moving(request, net, tmp_path_factory) -> Path:
    """A bundle with a mover."""
    folder = tmp_path_factory.mktemp("moving") / "bundle"
    mover = ShippedMover(net.weights(), MOTIONS, FOOTPRINT, 7, "config")
    write_bundle(
        folder, filter_of("matcher"), rendered()[1], PROVENANCE, precision=request.param, mover=mover
    )
    return folder


@pytest.fixture
def broken(moving, tmp_path) -> Path:
    """A copy to damage."""
    return Path(shutil.copytree(moving, tmp_path / "bundle"))


def test_a_bundle_proposes_what_torch_would(moving, net):
    """Along a recorded drive, whose columns run clockwise: the best clear motion by the network's logits."""
    localizer, drive, last = Localizer(load_bundle(moving)), rendered()[1][0], Motion(0.0, 0.0, 0.0)
    order, moves = np.argsort(STRIP.bearings_rad), torch.tensor(np.array(MOTIONS)).float()
    proposed, expected = [], []
    for row in range(40):
        depth = drive.depth_m[row]
        localizer.step(drive.odometry[row], depth, drive.rgb[row])
        with torch.no_grad():
            logits, _ = net(Outlooks.of([localizer.outlook(MOTIONS)]), moves, torch.tensor([last]).float())
        clear = clear_motions(MOTIONS, depth[order], np.array(STRIP.bearings_rad)[order], FOOTPRINT)
        expected.append(int(logits[0].masked_fill(~torch.from_numpy(clear), -torch.inf).argmax()))
        last = propose(localizer, depth, last)
        proposed.append(MOTIONS.index(last))
    assert len(set(expected)) > 1
    assert proposed == expected


def test_weights_of_the_mover_are_whole_at_any_precision(moving, net):
    """A few thousand numbers: float32."""
    held = load_file(moving / WEIGHTS)
    for name, array in net.weights().items():
        np.testing.assert_array_equal(held[f"policy.{name}"], array)


def test_a_bundle_without_a_mover_says_so(shipped):
    """Rather than proposing to stand."""
    localizer, drive = Localizer(load_bundle(shipped("matcher"))), rendered()[1][0]
    localizer.step(drive.odometry[0], drive.depth_m[0], drive.rgb[0])
    with pytest.raises(StepError, match="no mover"):
        propose(localizer, drive.depth_m[0])


def test_nothing_is_proposed_before_the_first_strip(moving):
    """There is no belief to go by."""
    with pytest.raises(StepError, match="first strip"):
        propose(Localizer(load_bundle(moving)), np.full(STRIP.columns, 2.0))


@pytest.mark.parametrize(
    ("change", "named"),
    [
        (lambda mover: mover.update(sectors=9), r"mover\.sectors"),
        (lambda mover: mover.update(motions=mover["motions"][:3]), "mover: does not fit"),
        (lambda mover: mover["footprint"].update(radius_m=0.05), "mover: does not fit"),
        (lambda mover: mover.pop("layers"), r"mover\.layers"),
    ],
)
def test_a_mover_that_does_not_fit_is_refused(broken, change, named):
    """Another pooling; no way to turn; a sensor beside the robot; a member missing."""
    edit(broken, lambda manifest: change(manifest["mover"]))
    with pytest.raises(BundleError, match=named):
        load_bundle(broken)


def test_a_missing_array_of_the_mover_is_named(broken):
    """As it stands in the file."""
    rewrite(broken, WEIGHTS, lambda arrays: arrays.pop("policy.mode_in.bias"))
    with pytest.raises(BundleError, match=r"policy\.mode_in\.bias"):
        load_bundle(broken)


def test_a_mover_that_nobody_declares_is_refused(broken):
    """Arrays without a member in the manifest."""
    edit(broken, lambda manifest: manifest.update(mover=None))
    with pytest.raises(BundleError, match="unknown array"):
        load_bundle(broken)

"""The smoother against textbook values, hmmlearn, and sums over every path."""

import itertools

import numpy as np
import pytest
import torch
from hmmlearn.hmm import CategoricalHMM
from scipy.optimize import brentq

from learnfilter.core.errors import DriveError, ImpossibleEvidence
from learnfilter.core.poses import between, compose
from learnfilter.core.seeds import stream
from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.drives.drive import Drive
from learnfilter.filtering.grid_filter import FilterState, start
from learnfilter.filtering.motion import Lattice, MotionModel, MotionSettings, predict
from learnfilter.filtering.smooth import smooth, smoothed_beliefs
from learnfilter.observe.contract import ObservationModel
from learnfilter.plan import read_plan
from learnfilter.render import cast_rings, grid_for, render_site

STILL = MotionSettings(1e-4, 1e-4, 1e-4, 1e-4)


def lattice(headings, live, dtype=torch.float64):
    live = torch.tensor(live, dtype=torch.bool)
    angles = torch.arange(headings, dtype=dtype) * 2 * torch.pi / headings
    return Lattice(live, 0.5, angles, torch.nonzero(live.flatten()).flatten())


def all_smoothed(where, odometry, likelihood, settings, floor=0.0, prior=None):
    """[s h r c] smoothed beliefs in float64; likelihood [s n h]."""
    state = start(where, 1) if prior is None else FilterState(prior[None], torch.zeros(1).double())
    motion = MotionModel(settings).double()
    log = torch.as_tensor(likelihood).double().log()
    steps = smoothed_beliefs(
        state, torch.as_tensor(odometry).double(), lambda s: log[s : s + 1], where, motion, floor
    )
    found = dict(steps)
    return np.stack([found[s].detach().numpy() for s in range(len(log))])


def two_heading_noise(odds_to_turn):
    """Spread at which a full turn leaves one of two headings with the given probability."""
    where = lattice(2, [[True]])
    here = torch.tensor([1.0, 0.0]).double().view(1, 2, 1, 1)
    turn = torch.tensor([[0.0, 0.0, 2 * np.pi]]).double()

    def miss(spread):
        motion = MotionModel(MotionSettings(spread, 1e-6, 1e-6, 1e-6)).double()
        return float(predict(here, turn, where, motion)[0][0, 1].sum()) - odds_to_turn

    return brentq(miss, 0.05, 1.0)


# Russell & Norvig, AIMA 3e, section 15.2.2: smoothed probability of rain, days 0 to 5
UMBRELLA = [
    ([1, 1, 0, 1, 1], [0.6469, 0.8673, 0.8204, 0.3075, 0.8204, 0.8673]),
    ([1, 0, 1, 0, 1], [0.5871, 0.7177, 0.2324, 0.6072, 0.2324, 0.7177]),
]


@pytest.mark.parametrize(("seen", "expected"), UMBRELLA)
def test_umbrella_world(seen, expected):
    """Two headings are the weather; a full turn leaves it as it is with probability 0.7."""
    settings = MotionSettings(two_heading_noise(0.3), 1e-6, 1e-6, 1e-6)
    sees = {1: [0.9, 0.2], 0: [0.1, 0.8]}
    likelihood = np.array([[[1.0, 1.0]], *([sees[u]] for u in seen)])
    odometry = np.tile([0, 0, 2 * np.pi], (6, 1))
    smoothed = all_smoothed(lattice(2, [[True]]), odometry, likelihood, settings)
    # printed to four digits; the noise is stored as float32
    np.testing.assert_allclose(smoothed[:, 0, 0, 0], expected, atol=6e-5)


def test_agrees_with_hmmlearn():
    """Turning in two cells, eight headings: posterior of every pose at every step."""
    rng, where = np.random.default_rng(3), lattice(8, [[True, False], [False, True]])
    emission = rng.dirichlet(np.full(6, 0.4), 16)  # [state symbol], states cell by cell
    settings, odometry = MotionSettings(0.4, 1e-6, 1e-6, 1e-6), np.tile([0, 0, 1.0], (6, 1))
    symbols = rng.integers(6, size=6)
    likelihood = emission[:, symbols].T.reshape(6, 2, 8)
    smoothed = all_smoothed(where, odometry, likelihood, settings).reshape(6, 8, 4)[:, :, [0, 3]]

    motion, one = MotionModel(settings).double(), torch.eye(8).double().view(8, 8, 1, 1)
    turn = torch.tensor([[0.0, 0.0, 1.0]]).double().expand(8, 3)
    turned = predict(one, turn, lattice(8, [[True]]), motion)[0].detach().numpy().reshape(8, 8)
    model = CategoricalHMM(16, init_params="", params="")
    model.startprob_, model.emissionprob_ = np.full(16, 1 / 16), emission
    model.transmat_ = np.kron(np.eye(2), turned)
    expected = model.score_samples(symbols[:, None])[1]
    np.testing.assert_allclose(smoothed.transpose(0, 2, 1).reshape(6, 16), expected, atol=1e-6)  # what is not kept


@pytest.mark.parametrize("floor", [0.0, 0.05])
def test_agrees_with_the_sum_over_every_path_along_a_walled_corridor(floor):
    """One cell forward a step, exactly; who would leave the corridor is gone; `floor` may carry off."""
    rng, cells, headings = np.random.default_rng(5), 5, 64
    likelihood = rng.uniform(0.05, 1, (4, cells))
    prior = np.zeros((headings, 1, cells))
    prior[0] = 1 / cells  # all look along the corridor; 64 headings keep the sideways blur small
    everywhere = np.repeat(likelihood[:, :, None], headings, axis=2)
    everywhere[:, :, 1:] *= 1e-30  # and whoever is carried off still does
    smoothed = all_smoothed(
        lattice(headings, [[True] * cells]), np.tile([0.5, 0, 0], (4, 1)), everywhere, STILL, floor,
        torch.from_numpy(prior),
    )  # fmt: skip

    filtered, steps = np.full(cells, 1 / cells) * likelihood[0], []
    for row in likelihood[1:]:  # the filter divides by what is left, then spreads the floor
        filtered = filtered / filtered.sum()
        step = np.eye(cells, k=1) * (1 - floor) / filtered[:-1].sum() + floor / cells / headings
        steps.append(step)
        filtered = filtered @ step * row
    expected = np.zeros((4, cells))
    for path in itertools.product(range(cells), repeat=4):
        weight = likelihood[0, path[0]]
        for t, step in enumerate(steps):
            weight *= step[path[t], path[t + 1]] * likelihood[t + 1, path[t + 1]]
        expected[np.arange(4), path] += weight
    # the least spread of a kernel is 0.001 cells, which leaves 4e-4 of the mass behind
    np.testing.assert_allclose(smoothed[:, 0, 0], expected / expected.sum(1, keepdims=True), atol=3e-3)


def test_the_last_step_is_the_filter_s_own():
    """No strip comes after it."""
    where, rng = lattice(8, [[True] * 4] * 3), np.random.default_rng(0)
    likelihood = rng.uniform(0.1, 1, (1, 12, 8))
    smoothed = all_smoothed(where, np.zeros((1, 3)), likelihood, MotionSettings())
    expected = (likelihood[0] / likelihood[0].sum()).T.reshape(8, 3, 4)
    np.testing.assert_allclose(smoothed[0], expected, atol=1e-9)


def test_strips_that_contradict_each_other_are_named():
    """Here, then still here though the odometry says one cell on."""
    here = np.zeros((2, 3, 64))
    here[:, 0] = 1.0
    with pytest.raises(ImpossibleEvidence):
        all_smoothed(lattice(64, [[True] * 3]), np.tile([0.5, 0, 0], (2, 1)), here, STILL)


class Nearness(ObservationModel):
    """Wide Gaussian of every reading about its expected range."""

    def __init__(self, layout, spread_m=0.3):
        super().__init__()
        self.layout, self.spread_m = layout, spread_m

    def read(self, site):
        return torch.from_numpy(site.range_m)

    def log_likelihood(self, strips, features):
        headings = range(self.layout.bearings // self.layout.bearings_per_heading)
        start = [h * self.layout.bearings_per_heading + self.layout.first for h in headings]
        columns = torch.tensor(start)[:, None] + torch.arange(self.layout.columns)
        miss = features[:, columns % self.layout.bearings] - strips.depth_m[:, None, None]
        return -0.5 * (miss / self.spread_m).square().sum(-1) / 4


@pytest.fixture(scope="module")
def office():
    """(site, true poses, drive without reference) along the toy office, odometry off by 2 %."""
    plan = read_plan("toy_worlds/lindqvist_office.geojson")
    strip = Strip(even_strip(-90, 15, 13), has_colour=False, mount=(0.1, 0.0, 0.0))
    layout = lay_on_ring(strip, 24, 1)
    site = render_site(
        plan, layout, grid_for(plan, 24, 0.25), robot_radius_m=0.2, max_range_m=8.0, windows="solid"
    )
    rng = stream(1, "office")
    motions = np.vstack([np.zeros(3), [[0.12, 0, 0]] * 22, [[0, 0, 0.15]] * 8, [[0.12, 0, 0]] * 8])
    poses = [np.array([1.1, 2.4, 0.0])]
    for motion in motions[1:]:
        poses.append(compose(poses[-1], motion))
    poses = np.array(poses)
    sensor = compose(poses, np.array(strip.mount))
    angles = np.array(strip.bearings_rad)
    depth = np.concatenate(
        [cast_rings(plan, p[:1], p[1:2], p[2] + angles, 8.0, "solid")[0] for p in sensor]
    )
    noisy = motions * (1 + rng.normal(0, 0.02, motions.shape))
    drive = Drive(
        np.arange(len(poses)) * 0.2, noisy, np.where(np.isfinite(depth), depth, np.nan), None, None, strip
    )
    return site, poses, drive


def label(office, **options):
    site, _, drive = office
    model, motion = Nearness(site.layout), MotionModel(MotionSettings(0.1, 0.05, 0.1, 0.05))
    return smooth(drive, site, model, motion, after_m=0.2, after_rad=0.2, floor=1e-4, **options)


def test_labels_lie_within_a_cell_of_the_truth(office):
    """Every row, those between weighed strips too, of the robot and not of its sensor."""
    _, poses, _ = office
    error = between(poses, label(office).reference)
    assert np.nanmax(np.hypot(error[:, 0], error[:, 1])) < 0.25
    assert np.nanmax(np.abs(error[:, 2])) < np.radians(7.5)  # half a heading bin


def test_all_strips_locate_the_start_too(office):
    """The filter does not know the first pose when it sees the first strip; the smoother does."""
    labels = label(office)
    assert np.isfinite(labels.reference).all() and labels.mass[0] > 0.9


def test_covariance_is_that_of_a_cell_at_least(office):
    """Positive definite, and no sharper than a uniform cell would be by ten times."""
    covariance = label(office).covariance
    assert np.linalg.eigvalsh(covariance).min() >= -1e-12
    assert covariance[:, 0, 0].max() < 0.25**2


def test_what_is_not_sure_is_not_labelled():
    """In a square room nobody can tell four poses apart: every reference pose is NaN."""
    plan = read_plan("toy_worlds/square_room.geojson")
    strip = Strip(even_strip(-90, 15, 13), has_colour=False)
    layout = lay_on_ring(strip, 24, 1)
    site = render_site(plan, layout, grid_for(plan, 24, 0.25), robot_radius_m=0.2, max_range_m=8.0)
    depth = cast_rings(plan, np.array([1.0]), np.array([1.3]), 0.3 + np.array(strip.bearings_rad), 8.0)[0]
    drive = Drive(np.arange(3.0), np.zeros((3, 3)), np.repeat(depth, 3, 0), None, None, strip)
    settings = {"after_m": 0.2, "after_rad": 0.2, "floor": 0.0}
    alone = smooth(drive, site, Nearness(layout, 0.1), MotionModel(), **settings)
    known = smooth(drive, site, Nearness(layout, 0.1), MotionModel(), known={2: [1.0, 1.3, 0.3]}, **settings)
    assert np.isnan(alone.reference).all()
    np.testing.assert_allclose(known.reference[0], [1.0, 1.3, 0.3], atol=0.13)  # half a cell, half a bin


def test_a_known_pose_of_no_row_is_refused(office):
    """Says which row, and how many there are."""
    with pytest.raises(DriveError, match="no such row"):
        label(office, known={500: [1, 1, 0]})

"""The smoother against textbook values, hmmlearn, and sums over every path."""

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
        return predict(here, turn, where, motion)[0].detach()[0, 1].sum().item() - odds_to_turn

    return brentq(miss, 0.05, 1.0, xtol=1e-6)


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
    rng, where = np.random.default_rng(3), lattice(8, [[True, False, False, True]])
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
    np.testing.assert_allclose(smoothed.transpose(0, 2, 1).reshape(6, 16), expected, atol=1e-6)


@pytest.mark.parametrize("floor", [0.0, 0.05])
def test_agrees_with_matrices_where_the_robot_drives_and_turns_among_walls(floor):
    """Rabiner's recursions with dense matrices; what a motion loses into walls is lost for good."""
    rng = np.random.default_rng(5)
    where, motion = lattice(4, [[True, True, False], [True, True, True]]), MotionModel().double()
    odometry = rng.uniform([-0.3, -0.6, -0.6], [0.9, 0.6, 0.6], (7, 3))
    likelihood = rng.uniform(0.01, 1, (7, 5, 4)) ** 3
    smoothed = all_smoothed(where, odometry, likelihood, MotionSettings(), floor)

    live = np.tile(where.live.numpy().ravel(), 4)
    states = torch.eye(24).double()[live].view(20, 4, 2, 3)
    seen = likelihood.transpose(0, 2, 1).reshape(7, 20)  # heading by heading, as the belief lies
    steps, filtered = [np.eye(20)], [seen[0] / seen[0].sum()]
    for t in range(1, 7):
        moved, lost = predict(states, torch.tensor(odometry[t]).expand(20, 3), where, motion)
        step = moved.detach().numpy().reshape(20, 24)[:, live] * (1 - lost.detach().numpy())[:, None]
        kept = filtered[-1] @ step.sum(1)
        steps.append((1 - floor) * step / kept + floor / 20)
        filtered.append(filtered[-1] @ steps[-1] * seen[t])
        filtered[-1] /= filtered[-1].sum()
    later, expected = np.ones(20), [filtered[-1]]
    for t in range(6, 0, -1):
        later = steps[t] @ (seen[t] * later)
        expected.insert(0, filtered[t - 1] * later / (filtered[t - 1] @ later))
    # the noise's spread is kept as float32
    np.testing.assert_allclose(smoothed.reshape(7, 24)[:, live], expected, atol=1e-6)


def test_a_later_strip_can_overturn_the_filter_s_firmest_belief():
    """Odds of e^30 for the wrong cell, then of e^40 against it: the first step's truth has odds e^10."""
    nats = np.zeros((2, 2, 2))
    nats[0, 1], nats[1, 0] = -30, -40
    smoothed = all_smoothed(lattice(2, [[True, False, False, True]]), np.zeros((2, 3)), np.exp(nats), STILL)
    np.testing.assert_allclose(smoothed[0, :, 0, 3].sum(), 1 / (1 + np.exp(-10.0)), atol=1e-6)


def test_the_last_step_is_the_filter_s_own():
    """No strip comes after it."""
    where, rng = lattice(8, [[True] * 4] * 3), np.random.default_rng(0)
    likelihood = rng.uniform(0.1, 1, (1, 12, 8))
    smoothed = all_smoothed(where, np.zeros((1, 3)), likelihood, MotionSettings())
    expected = (likelihood[0] / likelihood[0].sum()).T.reshape(8, 3, 4)
    np.testing.assert_allclose(smoothed[0], expected, atol=1e-9)


def test_strips_that_contradict_each_other_are_named():
    """Here, then far from here though the robot stood still."""
    here = np.zeros((2, 8, 2))
    here[0, 0], here[1, 7] = 1.0, 1.0
    with pytest.raises(ImpossibleEvidence):
        all_smoothed(lattice(2, [[True] * 8]), np.zeros((2, 3)), here, STILL)


class Nearness(ObservationModel):
    """Every reading near its expected range, or one in twenty a stray; four columns count as one."""

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
        return ((-0.5 * (miss / self.spread_m).square()).exp() + 0.05).log().sum(-1) / 4


@pytest.fixture(scope="module")
def office():
    """(site, true poses, drive without reference) along the toy office, odometry off by 2 %."""
    plan = read_plan("toy_worlds/lindqvist_office.geojson")
    strip = Strip(even_strip(-90, 10, 19), has_colour=False, mount=(0.3, 0.0, 0.6))
    layout = lay_on_ring(strip, 36, 1)
    site = render_site(
        plan, layout, grid_for(plan, 36, 0.25), robot_radius_m=0.2, max_range_m=8.0, windows="solid"
    )
    rng = stream(1, "office")
    motions = np.vstack([np.zeros(3), [[0.12, 0, 0]] * 22, [[0, 0, 0.15]] * 8, [[0.12, 0, 0]] * 8])
    poses = [np.array([1.1, 2.4, 0.0])]
    for motion in motions[1:]:
        poses.append(compose(poses[-1], motion))
    poses = np.array(poses)
    sensor = compose(poses, np.array(strip.mount))
    angles = np.array(strip.bearings_rad)
    depth = np.concatenate([cast_rings(plan, p[:1], p[1:2], p[2] + angles, 8.0, "solid")[0] for p in sensor])
    noisy = motions * (1 + rng.normal(0, 0.02, motions.shape))
    drive = Drive(
        np.arange(len(poses)) * 0.2, noisy, np.where(np.isfinite(depth), depth, np.nan), None, None, strip
    )
    return site, poses, drive


def label(office, **options):
    site, _, drive = office
    model, motion = Nearness(site.layout), MotionModel(MotionSettings(0.1, 0.05, 0.1, 0.05))
    return smooth(drive, site, model, motion, after_m=0.2, after_rad=0.2, floor=1e-4, **options)


@pytest.fixture(scope="module")
def labels(office):
    return label(office)


def test_labels_lie_within_a_cell_of_the_truth(office, labels):
    """Every row, those between weighed strips too, of the robot and not of its sensor."""
    error = between(office[1], labels.reference)
    assert np.hypot(error[:, 0], error[:, 1]).max() < 0.25
    assert np.abs(error[:, 2]).max() < np.radians(5)  # half a heading bin


def test_all_strips_locate_the_start_too(labels):
    """One strip leaves the first pose open; all of them settle it."""
    assert labels.mass[0] > 0.9


def test_covariance_is_that_of_one_mode(labels):
    """No negative variance, and no wider than a cell."""
    assert np.linalg.eigvalsh(labels.covariance).min() >= -1e-12
    assert labels.covariance[:, [0, 1], [0, 1]].max() < 0.25**2


def test_what_is_not_sure_is_not_labelled():
    """In a square room nobody can tell four poses apart: every reference pose is NaN."""
    plan = read_plan("toy_worlds/square_room.geojson")
    strip = Strip(even_strip(-90, 10, 19), has_colour=False)
    layout = lay_on_ring(strip, 36, 1)
    site = render_site(plan, layout, grid_for(plan, 36, 0.25), robot_radius_m=0.2, max_range_m=8.0)
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

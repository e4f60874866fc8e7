"""The Bayes filter against textbook examples, enumeration and another library."""

import numpy as np
import pytest
import torch
from hmmlearn.hmm import CategoricalHMM
from numpy.testing import assert_allclose
from scipy.ndimage import convolve
from torch.autograd import gradcheck

from learnfilter.core.errors import ImpossibleEvidence, ShapeError
from learnfilter.filtering.grid_filter import FilterState, lattice_of, start, weigh
from learnfilter.filtering.motion import MotionSettings, predict
from learnfilter.filtering.rollout import rollout
from tests.contracts.small import small_site
from tests.filtering.halls import at, drawn, lattice, motion, odometry
from tests.oracles import brute_force_belief

EXACT = 1e-12


def cells(prior, *likelihoods):
    """Weigh likelihoods [n] one after another on a row of n cells with one heading."""
    hall = lattice(1, 1, len(prior))
    belief = torch.tensor(prior, dtype=torch.float64).reshape(1, 1, 1, -1)
    state = FilterState(belief, torch.zeros(1, dtype=torch.float64))
    for row in likelihoods:
        state = weigh(state, torch.tensor(row, dtype=torch.float64).log().reshape(1, -1, 1), hall)
    return state.belief.flatten().numpy(), float(state.log_evidence)


def test_evidence_and_posterior_of_a_worked_example():
    """Prior (0.2, 0.5, 0.3), likelihood (0.6, 0.2, 0.9): evidence 0.49, posterior (12, 10, 27) / 49."""
    belief, log_evidence = cells([0.2, 0.5, 0.3], [0.6, 0.2, 0.9])
    assert_allclose(belief, np.array([12, 10, 27]) / 49, atol=EXACT)
    assert_allclose(log_evidence, np.log(0.49), atol=EXACT)


@pytest.mark.parametrize(
    ("prior", "likelihood", "expected"),
    [
        ([0.5, 0.5], [0.6, 0.2], [0.75, 0.25]),  # the door, Thrun, Burgard, Fox 2005, ch. 2
        ([0.95, 0.05], [0.6, 0.2], [57 / 58, 1 / 58]),  # the same after a push
        ([0.2] * 5, [0.2, 0.6, 0.6, 0.2, 0.2], np.array([1, 3, 3, 1, 1]) / 9),  # five cells, red seen
        (
            [0.1] * 10,
            [3, 3, 1, 1, 1, 1, 1, 1, 3, 1],
            [0.1875, 0.1875, *[0.0625] * 6, 0.1875, 0.0625],
        ),  # doors
    ],
)
def test_posteriors_of_published_examples(prior, likelihood, expected):
    """Doors and coloured cells; likelihoods need no normalising."""
    assert_allclose(cells(prior, likelihood)[0], expected, atol=EXACT)


def test_the_umbrella_world():
    """Rain persists with 0.7; umbrella 0.9 in rain, 0.2 without (Russell, Norvig, AIMA 15.2): filtered rain
    for u u -u u u, and the log-likelihood of it all.  Weather is predicted by hand."""
    stay = np.array([[0.7, 0.3], [0.3, 0.7]])
    belief, total, rain = np.array([0.5, 0.5]), 0.0, []
    for umbrella in (True, True, False, True, True):
        belief, log_evidence = cells(stay.T @ belief, [0.9, 0.2] if umbrella else [0.1, 0.8])
        total += log_evidence
        rain.append(belief[0])
    assert_allclose(rain, [0.81818182, 0.88335704, 0.19066794, 0.73079400, 0.86733889], atol=1e-8)
    assert_allclose(total, -3.3725020443, atol=1e-9)


def test_the_order_of_independent_evidence_does_not_matter():
    """Multiplication commutes; a constant likelihood changes nothing but the evidence."""
    a, b = [0.6, 0.2, 0.9], [0.1, 0.5, 0.5]
    prior = [0.2, 0.5, 0.3]
    assert_allclose(cells(prior, a, b)[0], cells(prior, b, a)[0], atol=EXACT)
    assert_allclose(cells(prior, [7.0] * 3)[0], prior, atol=EXACT)
    assert_allclose(cells(prior, [7.0] * 3)[1], np.log(7), atol=EXACT)


def test_evidence_adds_up_from_strip_to_strip():
    """log p(a) + log p(b | a) = log p(a, b), here the prior's mean of a b."""
    a, b, prior = [0.6, 0.2, 0.9], [0.1, 0.5, 0.5], [0.2, 0.5, 0.3]
    assert_allclose(cells(prior, a, b)[1], np.log(np.dot(prior, np.multiply(a, b))), atol=EXACT)


def test_very_small_likelihoods_do_not_underflow():
    """-2000 nats is zero as a probability, but only differences count."""
    hall = lattice(1, 1, 2)
    state = FilterState(
        torch.full((1, 1, 1, 2), 0.5, dtype=torch.float64), torch.zeros(1, dtype=torch.float64)
    )
    nats = torch.tensor([-2000.0, -2000.0 - np.log(3)], dtype=torch.float64).reshape(1, 2, 1)
    assert_allclose(weigh(state, nats, hall).belief.flatten().numpy(), [0.75, 0.25], atol=1e-10)


HALL = lattice(4, 3, 3, walls=[(1, 1)])
MOVE = odometry(0.2, 0.05, 0.4)
NOISE = MotionSettings(0.2, 0.1, 0.3, 0.05)


def steps():
    """[n n] chance of getting from pose to pose without meeting a wall, and [n] live poses."""
    live = HALL.live.expand(4, 3, 3).flatten()
    rows = []
    for place in torch.nonzero(live)[:, 0]:
        belief = torch.zeros(1, 36, dtype=torch.float64)
        belief[0, place] = 1
        moved, lost = predict(belief.view(1, 4, 3, 3), MOVE, HALL, motion(NOISE))
        rows.append((moved.flatten()[live] * (1 - lost)).detach())
    return torch.stack(rows).numpy(), live


def filtered(log_likelihoods):
    """[32] belief after strips and equal moves between them."""
    spread = torch.zeros(len(log_likelihoods), 36, dtype=torch.float64)
    _, live = steps()
    spread[:, live] = torch.from_numpy(log_likelihoods)
    per_cell = spread.view(-1, 4, 9)[:, :, HALL.cells].transpose(1, 2)
    uniform = start(HALL, 1)
    moves = MOVE.expand(len(log_likelihoods), 1, 3)
    states = rollout(uniform, moves, lambda s: per_cell[s : s + 1], HALL, motion(NOISE), 0.0)
    return [state.belief.flatten()[live].detach().numpy() for state in states]


def over_cells_by_scipy(log_likelihoods):
    """[s 32] log of likelihoods averaged over cells: scipy's convolution, live neighbours only."""
    _, live = steps()
    planes = np.zeros((len(log_likelihoods), 36))
    planes[:, live] = np.exp(log_likelihoods)
    kernel = np.outer([1, 6, 1], [1, 6, 1])[None, None] / 64
    seen = convolve(planes.reshape(-1, 4, 3, 3), kernel, mode="constant")
    there = convolve(HALL.live.numpy().astype(float)[None, None], kernel, mode="constant")
    return np.log((seen / there).reshape(-1, 36)[:, live])


def test_filtering_is_the_sum_over_all_paths():
    """Three strips, 32 poses: 32,768 paths added up one by one; walls end paths."""
    step, _ = steps()
    log_likelihoods = np.random.default_rng(0).normal(size=(3, 32))
    expected = brute_force_belief(np.full(32, 1 / 32), step, over_cells_by_scipy(log_likelihoods))
    assert_allclose(filtered(log_likelihoods)[-1], expected, atol=1e-10)


def test_filtering_is_a_hidden_markov_models():
    """hmmlearn's forward pass over the same steps, with one more state for what met a wall, which never
    shows any of the three symbols seen."""
    step, _ = steps()
    rng = np.random.default_rng(1)
    centres = rng.dirichlet(np.ones(3), size=32)
    shows = np.exp(over_cells_by_scipy(np.log(centres.T))).T  # the mean over cells sums to one as well
    symbols = rng.integers(0, 3, 8)
    model = CategoricalHMM(33, init_params="", params="")
    model.startprob_ = np.append(np.full(32, 1 / 32), 0)
    lost = 1 - step.sum(axis=1, keepdims=True)
    model.transmat_ = np.vstack([np.hstack([step, lost]), np.eye(33)[-1]])
    model.emissionprob_ = np.vstack([np.hstack([shows, np.zeros((32, 1))]), np.eye(4)[-1]])
    beliefs = filtered(np.log(centres[:, symbols].T))
    for t, belief in enumerate(beliefs):
        expected = model.score_samples(symbols[: t + 1, None])[1][-1]
        assert_allclose(belief, expected[:32], atol=1e-9)


def test_every_live_pose_is_alike_at_the_start():
    """1 / (live cells x headings) on live cells, nothing elsewhere."""
    site = small_site()
    belief = start(lattice_of(site), 2).belief
    expected = np.broadcast_to(site.live / (site.n_cells * site.grid.headings), belief.shape)
    assert_allclose(belief.numpy(), expected, rtol=1e-6)  # float32


def test_likelihoods_reach_the_cell_they_belong_to():
    """Certain of one live cell and heading: the belief is there."""
    site = small_site()
    hall = lattice_of(site)
    nats = torch.full((1, site.n_cells, site.grid.headings), -1e4)
    nats[0, 17, 5] = 0
    belief = weigh(start(hall, 1), nats, hall).belief
    assert float(belief[0, 5, site.cells[17, 0], site.cells[17, 1]]) == pytest.approx(1)


@pytest.mark.parametrize("worst", [-np.inf, np.nan, np.inf])
def test_evidence_that_explains_nothing_has_a_name(worst):
    """Minus infinity for all poses, or no number at all, is an error and not a belief."""
    hall = lattice(1, 1, 3)
    nats = torch.full((1, 3, 1), worst, dtype=torch.float64)
    with pytest.raises(ImpossibleEvidence):
        weigh(FilterState(at(hall, 0, 0, 0), torch.zeros(1)), nats, hall)


def certain_but_wrong(floor):
    """A belief in the first of three cells, which the strip rules out."""
    hall = lattice(1, 1, 3)
    nats = torch.tensor([-np.inf, 0.0, np.log(3)], dtype=torch.float64).reshape(1, 3, 1)
    return weigh(FilterState(at(hall, 0, 0, 0), torch.zeros(1)), nats, hall, floor)


def test_at_floor_zero_a_refuted_certainty_is_impossible():
    """The exact filter has nowhere to go."""
    with pytest.raises(ImpossibleEvidence):
        certain_but_wrong(0.0)


def test_a_floor_lets_the_belief_recover():
    """A share of 0.003 over three cells: 0.001 each; likelihoods 0, 1, 3 leave (0, 1, 3) / 4 and an evidence
    of 0.004."""
    state = certain_but_wrong(0.003)
    assert_allclose(state.belief.flatten().numpy(), [0, 0.25, 0.75], atol=1e-9)
    assert_allclose(state.log_evidence.numpy(), [np.log(0.004)], atol=1e-6)


def test_a_floor_takes_its_share_from_the_rest():
    """0.3 over three cells leaves (0.8, 0.1, 0.1) of a certainty, and is no evidence by itself."""
    hall = lattice(1, 1, 3)
    nothing = torch.zeros(1, 3, 1, dtype=torch.float64)
    state = weigh(FilterState(at(hall, 0, 0, 0), torch.zeros(1, dtype=torch.float64)), nothing, hall, 0.3)
    assert_allclose(state.belief.flatten().numpy(), [0.8, 0.1, 0.1], atol=EXACT)
    assert_allclose(state.log_evidence.numpy(), [0.0], atol=EXACT)


def test_likelihoods_of_another_lattice_are_refused():
    """Five headings where the lattice has four."""
    with pytest.raises(ShapeError, match="log_likelihood"):
        weigh(start(HALL, 1), torch.zeros(1, 8, 5, dtype=torch.float64), HALL)


def test_gradients_through_weighing():
    """gradcheck in float64, beside a wall and with a floor."""
    belief = drawn(HALL)
    nats = torch.randn(1, 8, 4, dtype=torch.float64, generator=torch.Generator().manual_seed(0))

    def weighed(belief, nats):
        return weigh(FilterState(belief, torch.zeros(1, dtype=torch.float64)), nats, HALL, 0.01)

    assert gradcheck(weighed, (belief.requires_grad_(), nats.requires_grad_()))


def test_gradients_through_three_strips():
    """gradcheck in float64 of a rollout's last belief in likelihoods and motion spreads."""
    hall = lattice(4, 3, 3, walls=[(1, 1)])
    model = motion(NOISE)
    spreads = model.log_spread.detach().clone().requires_grad_()
    del model.log_spread
    generator = torch.Generator().manual_seed(0)
    nats = torch.randn(3, 1, 8, 4, dtype=torch.float64, generator=generator, requires_grad=True)

    def last(nats, log_spread):
        model.log_spread = log_spread
        moves = MOVE.expand(3, 1, 3)
        *_, state = rollout(start(hall, 1), moves, lambda s: nats[s], hall, model, 1e-3)
        return state.belief

    assert gradcheck(last, (nats, spreads), fast_mode=True)

"""Exact gains of looking, against textbook tables and closed forms, in bits."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import entropy as scipy_entropy

from learnfilter.core.errors import ShapeError
from learnfilter.core.seeds import stream
from learnfilter.movers.entropy import expected_entropy, greedy, information_gain

BIT = np.log(2)
# Cover and Thomas 2006, example 2.2.1: joint of Y (rows) and X (columns), in 32nds
TABLE = np.array([[4, 2, 1, 1], [2, 4, 1, 1], [2, 2, 2, 2], [8, 0, 0, 0]]) / 32
DOOR, WALL = np.array([0.8, 0.2]), np.array([0.1, 0.9])  # p(seen as door, as wall | what is there)
RING = np.stack([DOOR if cell in (0, 2, 3) else WALL for cell in range(6)], axis=1)


def split(joint):
    """Belief over columns, and likelihood of rows given the column."""
    return joint.sum(axis=0), joint / joint.sum(axis=0)


def test_a_textbook_table_leaves_eleven_eighths_of_a_bit():
    """H(X | Y) of Cover and Thomas 2006, example 2.2.1."""
    assert expected_entropy(*split(TABLE)) / BIT == pytest.approx(11 / 8, abs=1e-12)


@pytest.mark.parametrize("joint", [TABLE, TABLE.T])
def test_a_textbook_table_tells_three_eighths_of_a_bit(joint):
    """I(X; Y) of the same example, from either side."""
    assert information_gain(*split(joint)) / BIT == pytest.approx(3 / 8, abs=1e-12)


def test_a_symmetric_table():
    """Murphy 2022, ch. 6: joint [1/8 3/8; 3/8 1/8] has 0.1887219 bit."""
    joint = np.array([[1, 3], [3, 1]]) / 8
    assert information_gain(*split(joint)) / BIT == pytest.approx(0.1887219, abs=1e-7)


@pytest.mark.parametrize(
    ("belief", "error", "bits"),
    [((0.2, 0.8), 0.1, 0.3577508), ((0.5, 0.5), 0.1, 0.5310044), ((0.5, 0.5), 0.2, 0.2780719)],
)
def test_a_binary_symmetric_channel(belief, error, bits):
    """Mutual information H_b(p(z)) - H_b(error), Cover and Thomas 2006, section 7.1.4."""
    channel = [[1 - error, error], [error, 1 - error]]
    assert information_gain(belief, channel) / BIT == pytest.approx(bits, abs=1e-7)


@given(seed=st.integers(0, 10**6), places=st.integers(1, 6), views=st.integers(1, 5))
@settings(deadline=None, derandomize=True)
def test_a_gain_is_never_negative_nor_more_than_there_is_to_know(seed, places, views):
    """0 <= I(X; Z) <= min(H(X), H(Z)), entropies by SciPy; 1e-12 is rounding."""
    rng = np.random.default_rng(seed)
    belief, likelihood = rng.dirichlet(np.ones(places)), rng.dirichlet(np.ones(views), places).T
    most = min(scipy_entropy(belief), scipy_entropy(likelihood @ belief))
    assert -1e-12 <= information_gain(belief, likelihood) <= most + 1e-12


def test_one_door_among_four_cells():
    """Uniform, p(door | door) 0.6, p(door | wall) 0.2: 2 bits fall to 1.9028928 (by hand)."""
    likelihood = [[0.6, 0.2, 0.2, 0.2], [0.4, 0.8, 0.8, 0.8]]
    assert expected_entropy(np.full(4, 0.25), likelihood) / BIT == pytest.approx(1.9028928, abs=1e-7)


def test_a_view_without_noise_splits_eight_places():
    """Two against six: what is told is the entropy of a coin that falls 1 : 3."""
    door = np.array([1.0, 1, 0, 0, 0, 0, 0, 0])
    gain = information_gain(np.full(8, 1 / 8), [door, 1 - door])
    assert gain == pytest.approx(scipy_entropy([0.25, 0.75]), abs=1e-12)


def ring_gains(moves):
    """Gain of exact moves around a ring of six with doors at 0, 2 and 3, where 0 and 2 are believed in."""
    belief = np.array([0.5, 0, 0.5, 0, 0, 0])
    return np.array([information_gain(np.roll(belief, move), RING) for move in moves])


def test_moves_around_a_ring_of_doors():
    """Staying shows two doors, going back two walls; ahead lie a wall and a door (by hand, bits)."""
    np.testing.assert_allclose(
        ring_gains([0, -1, 1, 2]) / BIT, [0, 0, 0.3973126, 0.3973126], rtol=0, atol=1e-7
    )


def test_a_price_on_the_way_prefers_the_nearer_of_two_good_moves():
    """At 0.1 bit a cell one step is the only choice."""
    moves = np.array([0, -1, 1, 2])
    assert greedy(ring_gains(moves), 0.1 * BIT * np.abs(moves), stream(0)) == 2


def test_equal_moves_are_drawn():
    """Without a price one and two steps tell the same, and no other is ever chosen."""
    rng = stream(0)
    assert {greedy(ring_gains([0, -1, 1, 2]), np.zeros(4), rng) for _ in range(40)} == {2, 3}


def test_noise_of_the_move_is_no_loss_of_looking():
    """From one sure cell to two: a look that tells nothing gains 0, though a bit more is left than before."""
    spread, blind = [0.5, 0.5], [[0.3, 0.3], [0.7, 0.7]]
    assert information_gain(spread, blind) == pytest.approx(0, abs=1e-12)
    assert expected_entropy(spread, blind) / BIT == pytest.approx(1, abs=1e-12)


def test_places_must_agree():
    """A column for every place."""
    with pytest.raises(ShapeError):
        expected_entropy([0.5, 0.5], [[1.0, 1.0, 1.0]])

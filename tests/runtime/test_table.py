"""Scores by frequency against a correlation written out, in 32 bits and in 8."""

import tracemalloc

import numpy as np
import pytest

from learnfilter.runtime.table import BLOCK, RingTable

CHANNELS = 3


def rings(count: int, bearings: int) -> np.ndarray:
    return np.random.default_rng(0).normal(size=(count, bearings, CHANNELS)).astype(np.float32)


def strip(bearings: int) -> np.ndarray:
    """What a strip asks: something in the first half of the ring, nothing behind."""
    asked = np.random.default_rng(1).normal(size=(bearings, CHANNELS)).astype(np.float32)
    asked[bearings // 2 :] = 0
    return asked


def table(features: np.ndarray, looks: int, small: bool = False) -> RingTable:
    return RingTable(lambda part: features[part], *features.shape, looks, small)


def correlation(features: np.ndarray, asked: np.ndarray, looks: int) -> np.ndarray:
    """[looks n] in float64: at look l the strip lies l x bearings / looks further on."""
    turned = [np.roll(asked.astype(float), look * len(asked) // looks, axis=0) for look in range(looks)]
    return np.einsum("lpc,npc->ln", np.stack(turned), features.astype(float))


@pytest.mark.parametrize(("bearings", "looks"), [(16, 16), (16, 8), (15, 5), (64, 32)])
def test_scores_are_a_plain_correlation(bearings, looks):
    """At every turn of the strip, for rings of even and odd length."""
    features, asked = rings(20, bearings), strip(bearings)
    found = table(features, looks).scores(asked, slice(None))
    # float32 sums of up to 96 products near one
    np.testing.assert_allclose(found, correlation(features, asked, looks), atol=1e-4)


def test_eight_bits_err_by_no_more_than_half_a_step_each():
    """Every stored number is rounded to the nearest of 127 steps up to 1.25 times the largest."""
    features, asked = rings(40, 16), strip(16)
    expected = correlation(features, asked, 8)
    found = table(features, 8, small=True).scores(asked, slice(None))
    spectra, strips = np.fft.rfft(features, axis=1), np.fft.rfft(asked, axis=0)
    largest = np.maximum(np.abs(spectra.real), np.abs(spectra.imag)).max(axis=0)
    half = 1.25 * largest / 127 / 2
    twins = np.r_[1, np.full(7, 2), 1]  # frequencies that stand for two
    each = (half * (np.abs(strips.real) + np.abs(strips.imag))).sum(axis=1)
    bound = np.sqrt(2) * (twins * each).sum() / 16  # a sine's and a cosine's error at once
    assert 0 < np.abs(found - expected).max() <= bound


def test_eight_bits_need_a_quarter_of_the_memory():
    """One byte a number instead of four."""
    features = rings(40, 16)
    assert table(features, 8, small=True).values.nbytes * 4 == table(features, 8).values.nbytes


def test_a_number_beyond_the_sample_is_clipped():
    """No wrapping round of bytes, which would turn the strongest answer into its opposite."""
    features, asked = rings(1000, 16), np.zeros((16, CHANNELS), np.float32)
    features[998] *= 100  # every third cell is sampled, from the first on: not this one
    asked[0, 0] = 1
    largest = np.abs(correlation(features[998:999], asked, 8)).argmax()
    exact, found = (table(features, 8, small).scores(asked, slice(None))[largest, 998] for small in (0, 1))
    assert 0 < found / exact < 1


@pytest.mark.parametrize("small", [False, True])
def test_scores_do_not_depend_on_what_was_asked_before(small):
    """One cell, some in disorder, then all: each as in a table of which all are asked at once."""
    features, asked = rings(2 * BLOCK + 100, 16), strip(16)
    expected, asked_bit_by_bit = (
        table(features, 8, small).scores(asked, slice(None)),
        table(features, 8, small),
    )
    for cells in (np.array([1100]), np.array([900, 3, 1100, 4]), slice(None)):
        found = asked_bit_by_bit.scores(asked, cells)
        # float32 products in another order
        np.testing.assert_allclose(found, expected[:, cells], atol=1e-4)


def test_features_are_computed_once_and_where_they_are_needed():
    """Block by block."""
    features, computed = rings(2 * BLOCK, 16), []

    def compute(part: slice) -> np.ndarray:
        computed.append(part.start)
        return features[part]

    lazy = RingTable(compute, *features.shape, 8)
    for cells in (np.array([BLOCK + 1]), np.array([BLOCK + 2]), slice(None), slice(None)):
        lazy.scores(strip(16), cells)
    assert computed == [BLOCK, 0]


def test_memory_does_not_grow():
    """A hundred strips leave nothing behind."""
    features = rings(600, 16)
    grown = table(features, 8)
    tracemalloc.start()
    grown.scores(strip(16), slice(None))
    first = tracemalloc.get_traced_memory()[0]
    for cell in range(100):
        grown.scores(strip(16), np.array([cell, 599]))
    last = tracemalloc.get_traced_memory()[0]
    tracemalloc.stop()
    assert last - first < 5_000  # a strip's scores, kept each time, would be 6,400

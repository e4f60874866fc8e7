"""Named streams of random numbers."""

import numpy as np
from numpy.testing import assert_array_equal

from learnfilter.core.seeds import stream


def test_a_stream_never_changes():
    """SHA-256 and NumPy's PCG64 are both fixed by their makers: SeedSequence of the seed and the first four
    little-endian words of the path's digest (worked out with hashlib and struct)."""
    import hashlib
    import struct

    words = struct.unpack("<4I", hashlib.sha256(b"rehearse/site/3").digest()[:16])
    expected = np.random.Generator(np.random.PCG64(np.random.SeedSequence([7, *words]))).integers(
        2**32, size=4
    )
    assert_array_equal(stream(7, "rehearse", "site", 3).integers(2**32, size=4), expected)


def test_other_names_and_seeds_give_other_numbers():
    """Twelve streams, twelve first draws of 64 bits."""
    draws = {int(stream(seed, name, i).integers(2**63)) for seed in (0, 1) for name in "abc" for i in (0, 1)}
    assert len(draws) == 12


def test_drawing_from_one_stream_leaves_the_others_alone():
    """A new consumer shifts nobody's numbers."""
    before = stream(1, "sites").normal(size=3)
    stream(1, "light").normal(size=100)
    assert_array_equal(stream(1, "sites").normal(size=3), before)


def test_streams_are_uncorrelated():
    """Neighbouring iterations: correlation of 20,000 pairs stays below five standard errors."""
    a, b = stream(3, "filter", 10).normal(size=20_000), stream(3, "filter", 11).normal(size=20_000)
    assert abs(np.corrcoef(a, b)[0, 1]) < 5 / np.sqrt(20_000)

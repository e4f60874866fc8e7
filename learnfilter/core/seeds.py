"""Seeded streams: every random thing draws from a generator that has a name.

Adding a consumer never shifts the numbers another one sees, since each stream is derived from the
seed and its own path of names, not from the order of calls.
"""

from __future__ import annotations

import hashlib

import numpy as np


def stream(seed: int, *path: str | int) -> np.random.Generator:
    """A generator for one purpose, for example `stream(7, "rehearse", "site", 3)`."""
    digest = hashlib.sha256("/".join(map(str, path)).encode()).digest()
    words = np.frombuffer(digest[:16], dtype="<u4")
    return np.random.default_rng(np.random.SeedSequence([int(seed), *map(int, words)]))

"""Thread counts and waiting policy, set once and in this one place.

numba's and torch's OpenMP pools spin against each other while they wait (seconds where milliseconds
would do), so waiting is passive and numba takes its own layer, which must not be called from two
Python threads at once.  Both libraries read the environment when they are first imported.
"""

from __future__ import annotations

import os
import sys


def wait_passively() -> None:
    """Choose how idle threads wait; call before torch or numba is imported."""
    os.environ["OMP_WAIT_POLICY"] = "PASSIVE"
    os.environ["NUMBA_THREADING_LAYER"] = "workqueue"


def set_threads(count: int | None) -> None:
    """Let numba and torch use `count` threads each; None leaves what the environment says."""
    if count is None:
        return
    for library, variable in (("torch", "OMP_NUM_THREADS"), ("numba", "NUMBA_NUM_THREADS")):
        if library in sys.modules:  # it has read its variable and will not look again
            sys.modules[library].set_num_threads(count)
        else:
            os.environ[variable] = str(count)

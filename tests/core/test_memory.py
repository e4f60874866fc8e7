"""Giving memory back."""

import subprocess
import sys

SCRIPT = """
from learnfilter.core.memory import give_back_memory
def resident():
    return int(open("/proc/self/statm").read().split()[1]) * 4096
blocks = [b"x" * (100_000 + i % 2) for i in range(2000)]
pinned = blocks[::2][-1]
held = resident()
del blocks
give_back_memory()
print(held - resident())
"""


def test_freed_memory_goes_back_to_the_system():
    """Of 200 MB freed with a pinned block on top, at least 150 MB leave the process."""
    if not sys.platform.startswith("linux"):
        import pytest

        pytest.skip("the C library of this system has no such call")
    out = subprocess.run([sys.executable, "-c", SCRIPT], capture_output=True, text=True, check=True)
    assert int(out.stdout) > 150e6

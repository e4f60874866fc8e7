"""On a robot there is NumPy and safetensors, and nothing else of ours."""

import subprocess
import sys
from pathlib import Path

import pytest

from tests.shipping import KINDS

TOP = Path(__file__).resolve().parents[2]
ALONE = """
import sys
for name in ("torch", "numba", "scipy", "shapely", "hydra", "omegaconf", "rich", "pyarrow", "matplotlib"):
    sys.modules[name] = None
import numpy as np
from learnfilter.runtime import Localizer, load_bundle
localizer = Localizer(load_bundle(sys.argv[1]))
for _ in range(2):
    answer = localizer.step((0.5, 0.0, 0.0), np.full(16, 2.0), np.full((16, 3), 0.4))
print(answer.weighed, answer.state)
"""


@pytest.mark.parametrize("kind", KINDS)
def test_a_bundle_runs_where_nothing_else_is_installed(shipped, kind):
    """A fresh interpreter in which what trains cannot be imported."""
    command = [sys.executable, "-c", ALONE, str(shipped(kind))]
    done = subprocess.run(command, cwd=TOP, capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["True", "searching"]

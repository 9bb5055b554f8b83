"""The peak of a solve beside what was predicted: measured by the operating system, in a process of its own."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = """
import json, sys
import numpy as np
from spin_models import chain, heisenberg
from manybody.model.couplings import exchange, field
from manybody.model.quantization import quantize
from manybody.quantum.result import QuantumSettings
from manybody.quantum.sweeps import matrix_product_ground_state, predict


class Kept:
    '''A checkpoint in memory that wants to be written every 300 steps.'''

    def __init__(self):
        self.asked = 0

    def load(self):
        return None

    def save(self, data):
        self.data = data

    def due(self):
        self.asked += 1
        return self.asked % 300 == 0


def peak():
    # not ru_maxrss, which a new process takes over from the one that started it
    lines = open("/proc/self/status").read().splitlines()
    return 1024 * next(int(line.split()[1]) for line in lines if line.startswith("VmHWM"))


name, bond = sys.argv[1], int(sys.argv[2])
if name == "canted":
    turned = exchange(24, chain(24), np.diag([1.0, 0.8, 0.5])) + field(24, np.arange(24), (0.3, 0.1, 0.4))
    op = quantize(turned, 1.0)
else:
    sites, spin = {"half": (64, 0.5), "one": (48, 1.0), "two": (24, 2.0), "five": (16, 5.0)}[name]
    op = heisenberg(sites, chain(sites), spin)
matrix_product_ground_state(op, QuantumSettings(max_bond=8, accuracy=1e-12))
settings = QuantumSettings(max_bond=bond, accuracy=1e-13)
before = peak()
result = matrix_product_ground_state(op, settings, checkpoint=Kept())
print(json.dumps([result.bond_dimension, peak() - before, predict(op, settings).bytes]))
"""


SLOW = [("one", 160), ("two", 300), ("five", 400), ("canted", 100)]


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="the peak of a process is read from Linux's /proc")
@pytest.mark.parametrize(
    ("name", "bond"), [("half", 160), *(pytest.param(*case, marks=pytest.mark.slow) for case in SLOW)]
)
def test_peak_memory_stays_within_the_prediction(name, bond):
    root = Path(__file__).resolve().parents[2]
    environment = {
        **os.environ, "PYTHONPATH": f"{root}{os.pathsep}{root / 'tests'}", "OPENBLAS_NUM_THREADS": "1"
    }  # fmt: skip
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT, name, str(bond)], env=environment, capture_output=True, text=True, timeout=600
    )
    assert done.returncode == 0, done.stderr
    reached, used, predicted = json.loads(done.stdout)
    assert reached > 0.8 * bond
    # The first number is the promise; the second keeps the promise from becoming an empty one.
    assert used < 1.5 * predicted
    assert used > 0.2 * predicted

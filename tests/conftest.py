"""One linear-algebra thread, as workers have, set before numpy is imported: tests neither wait nor wobble. The other
core compiles what the sweeps will need meanwhile."""

import os
import subprocess
import sys
from pathlib import Path

for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
    os.environ.setdefault(name, "1")

compiling: list[subprocess.Popen] = []


def pytest_collection_finish(session):
    if len(session.items) > 500:  # a whole suite; a few tests would only be slowed down
        script = Path(__file__).with_name("compile_kernels.py")
        quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
        compiling.append(subprocess.Popen([sys.executable, str(script)], **quiet))


def pytest_sessionfinish(session):
    for process in compiling:
        process.kill()
        process.wait()

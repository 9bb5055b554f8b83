"""Calibration of the cost model: what parts really took against what was expected, kind by kind.

The expectations themselves (`Task.seconds`, `Task.bytes`) come from estimates.py. They get the scaling about right; how
fast this machine is, only the study itself can tell.
"""

from __future__ import annotations

import math
from bisect import insort

import numpy as np

MANY = 400  # measurements kept per kind, evenly thinned beyond


class CostModel:
    """Turns expected seconds into likely seconds through the parts measured so far.

    Per kind, log(measured) = a + b log(expected) by least squares with b between 0.3 and 1.5; with fewer than eight
    measurements, or expectations within a factor 10 of each other, b = 1. Memory: the largest ratio measured/expected
    seen where it matters (above 100 MB), never below 1: too small a guess kills a worker, too large a one only delays.
    """

    def __init__(self) -> None:
        self._pairs: dict[str, list[tuple[float, float]]] = {}
        self._seen: dict[str, int] = {}
        self._fit: dict[str, tuple[float, float, int]] = {}
        self._memory: dict[str, float] = {}

    def measured(self, kind: str, expected: float, seconds: float, expected_bytes: float = 0, peak: float = 0) -> None:
        if expected > 0 and seconds > 0:
            self._seen[kind] = self._seen.get(kind, 0) + 1
            pairs = self._pairs.setdefault(kind, [])
            insort(pairs, (math.log(expected), math.log(seconds)))
            if len(pairs) > 2 * MANY:
                del pairs[1:-1:2]
            self._fit.pop(kind, None) if self._seen[kind] < 50 or self._seen[kind] % 50 == 0 else None
        if peak > 1e8 and expected_bytes > 0:
            self._memory[kind] = max(self._memory.get(kind, 1.0), min(peak / expected_bytes, 10.0))

    @property
    def total(self) -> int:
        """How many parts have been measured."""
        return sum(self._seen.values())

    def known(self, kind: str) -> int:
        """How many parts of this kind have been measured."""
        return self._seen.get(kind, 0)

    def seconds(self, kind: str, expected: float) -> float:
        pairs = self._pairs.get(kind)
        if not pairs or expected <= 0:
            return expected
        if kind not in self._fit:
            x, y = np.array(pairs).T
            slope = 1.0
            if len(x) >= 8 and x[-1] - x[0] > math.log(10):
                dx = x - x.mean()
                slope = float(np.clip(dx @ (y - y.mean()) / (dx @ dx), 0.3, 1.5))
            # the mean of log underestimates sums; half the variance puts that right for log-normal scatter
            rest = y - slope * x
            self._fit[kind] = (float(rest.mean() + min(0.5 * rest.var(), 1.0)), slope)
        a, b = self._fit[kind]
        return math.exp(a + b * math.log(expected))

    def bytes(self, kind: str, expected: float) -> float:
        return expected * self._memory.get(kind, 1.0)


def gigabytes(count: float) -> str:
    """Bytes as people read them."""
    for unit, size in (("TB", 1e12), ("GB", 1e9), ("MB", 1e6)):
        if count >= size:
            return f"{count / size:.1f} {unit}"
    return f"{count / 1e3:.0f} kB"


def duration(seconds: float) -> str:
    """Seconds as people read them."""
    if not math.isfinite(seconds):
        return "?"
    if seconds < 1:
        return f"{seconds * 1e3:.0f} ms"
    if seconds < 60:
        return f"{seconds:.0f} s"
    if seconds < 3600:
        return f"{seconds / 60:.0f} min"
    if seconds < 48 * 3600:
        return f"{seconds / 3600:.1f} h"
    return f"{seconds / 86400:.1f} days"

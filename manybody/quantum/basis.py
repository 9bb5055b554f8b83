"""The states of a total-S^z sector (or of the whole space), numbered without ever listing the whole space.

A state is a tuple of digits s_i = S_i - m_i, read as a number with site 0 slowest. The sites are cut into a left and
a right half; a state's number is then start[left] + rank[right], two look-ups in tables of the size of a half.
"""

import functools
import math

import numpy as np

LARGEST_HALF = 2**26


class TooLarge(ValueError):
    """The space does not fit the number formats or tables of exact diagonalization."""


def sector_dimensions(spins: np.ndarray) -> np.ndarray:
    """Dimension of every sector as floats (exact below 2^53); entry n is total S^z = sum S_i - n."""
    counts = np.ones(1)
    for spin in spins:
        counts = np.convolve(counts, np.ones(round(2 * spin) + 1))
    return counts


def sector_index(spins: np.ndarray, sector: float) -> int:
    """n = sum S_i - S^z; raises ValueError where the spins have no such sector."""
    total = float(np.sum(spins))
    n = round(total - sector)
    if abs(total - sector - n) > 1e-9 or not 0 <= n <= round(2 * total):
        raise ValueError(f"these spins have no sector S^z = {sector}; it runs from {-total} to {total} in steps of 1")
    return n


class Basis:
    """States of one sector, S^z = `sector`, or of the whole space (None), in ascending order of their digits.

    dimension: number of states. cut: the sites 0 ... cut - 1 form the left half. left_start, left_counts: where the
    states of each left code start and how many there are; they pair it with right_order[right_first[left]], ... in
    this order. Raises TooLarge where the tables or numbers would not fit, ValueError for a sector that does not
    exist.
    """

    def __init__(self, spins: np.ndarray, sector: float | None = None):
        self.spins = np.asarray(spins, dtype=float)
        self.sector = sector
        self.dims = tuple(round(2 * s) + 1 for s in self.spins)
        sizes = [math.prod(self.dims[:k]) for k in range(len(self.dims) + 1)]
        self.cut = min(range(len(self.dims) + 1), key=lambda k: max(sizes[k], sizes[-1] // sizes[k]))
        self.left_size, self.right_size = sizes[self.cut], math.prod(self.dims[self.cut :])
        if max(self.left_size, self.right_size) > LARGEST_HALF:
            raise TooLarge(f"a half of {len(self.dims)} sites has {max(self.left_size, self.right_size)} states")
        self._left, self._right = self.dims[: self.cut], self.dims[self.cut :]
        if sector is None:
            right_sum = np.zeros(self.right_size, dtype=np.int32)
            need = np.zeros(self.left_size, dtype=np.int32)
        else:
            right_sum = _digit_sums(self._right)
            need = sector_index(self.spins, sector) - _digit_sums(self._left)
        # Right codes in order of their digit sum, ascending inside each sum.
        self.right_order = np.argsort(right_sum, kind="stable").astype(np.int32)
        per_sum = np.bincount(right_sum)
        first = np.concatenate([[0], np.cumsum(per_sum)])
        self.right_rank = np.empty(self.right_size, dtype=np.int64)
        self.right_rank[self.right_order] = np.arange(self.right_size) - np.repeat(first[:-1], per_sum)
        possible = (need >= 0) & (need < len(per_sum))
        need = np.where(possible, need, 0)
        counts = np.where(possible, per_sum[need], 0)
        self.left_counts = counts
        self.left_start = np.concatenate([[0], np.cumsum(counts)])
        self.dimension = int(self.left_start[-1])
        self.right_first = first[need]

    def codes(self, start: int, stop: int) -> tuple[np.ndarray, np.ndarray]:
        """Left and right code (int64) of the states start ... stop - 1."""
        stop = min(stop, self.dimension)
        low = int(np.searchsorted(self.left_start, start, side="right")) - 1
        high = int(np.searchsorted(self.left_start, stop, side="left"))
        lefts = np.arange(low, high)
        edges = np.clip(self.left_start[low : high + 1], start, stop)
        left = np.repeat(lefts, np.diff(edges))
        rank = np.arange(start, stop) - self.left_start[left]
        return left, self.right_order[self.right_first[left] + rank].astype(np.int64)

    def index(self, left: np.ndarray, right: np.ndarray) -> np.ndarray:
        """State numbers of codes that belong to the sector (not checked)."""
        return self.left_start[left] + self.right_rank[right]

    @functools.cached_property
    def left_digits(self) -> np.ndarray:
        """(cut, left_size) digits of every left code."""
        return _digits(self._left)

    @functools.cached_property
    def right_digits(self) -> np.ndarray:
        """(N - cut, right_size) digits of every right code."""
        return _digits(self._right)

    def stride(self, site: int) -> int:
        """What one step of a site's digit adds to the code of its half."""
        return math.prod(self.dims[site + 1 : self.cut]) if site < self.cut else math.prod(self.dims[site + 1 :])

    def digit(self, site: int, left: np.ndarray, right: np.ndarray) -> np.ndarray:
        """Digits of one site for states given by their codes."""
        if site < self.cut:
            return self.left_digits[site].take(left)
        return self.right_digits[site - self.cut].take(right)

    def full_codes(self) -> np.ndarray:
        """Code of every state in the whole space (numpy.kron order)."""
        left, right = self.codes(0, self.dimension)
        return left * self.right_size + right


def _digit_sums(dims: tuple[int, ...]) -> np.ndarray:
    sums = np.zeros(1, dtype=np.int32)
    for d in dims:
        sums = (sums[:, None] + np.arange(d, dtype=np.int32)).reshape(-1)
    return sums


def _digits(dims: tuple[int, ...]) -> np.ndarray:
    size = math.prod(dims)
    table = np.empty((len(dims), size), dtype=np.int16)
    for k, d in enumerate(dims):
        after = math.prod(dims[k + 1 :])
        table[k] = np.tile(np.repeat(np.arange(d, dtype=np.int16), after), size // (d * after))
    return table

"""Translations that leave a quadratic form unchanged, and what they make exact: its spectrum, by plane waves.

The form alone is asked: translations are looked for among the cyclic shifts of the site number by s within blocks of B
sites, s | B | N, on several levels, every s a multiple of the B before. That finds all tori whose sites are numbered
cell by cell (alternating couplings make larger cells); other numberings are not recognized, which costs speed and
proofs, never correctness.

The lowest plane waves make starts (Luttinger and Tisza 1946, Phys. Rev. 70, 954), and multipliers that are the same in
every cell make lower bounds (multipliers.py) at any size: the bound is a concave function of the multipliers, so that
their average over the translations is at least as good.
"""

import functools
import math
from collections.abc import Iterator

import numpy as np
from scipy.optimize import minimize
from scipy.spatial.transform import Rotation

from manybody.classical.site_form import SiteForm
from manybody.classical.sphere_product import normalized

MOST_CELL = 24  # vector components of a cell that are worth diagonalizing at every wavevector
ROUNDING = 2.0**-53
SAME = 1e-14  # deviation of couplings, relative to the largest, that counts as rounding
AT_ONCE = 2**22  # entries of the matrices that are diagonalized at once
SAMPLE = 2000  # sites on which waves are combined
MOST_WAVES = 8  # wavevectors that are combined


def plane_waves(form: SiteForm) -> "PlaneWaves | None":
    """The plane waves of a form with at most MOST_CELL vector components in its cell; None where there are none."""
    most = MOST_CELL // (1 if form.isotropic else 3)
    divisors = [d for d in range(1, math.isqrt(form.sites) + 1) if form.sites % d == 0]
    divisors = sorted({*divisors, *(form.sites // d for d in divisors)})
    shape, closed, base, cell = [], [], 1, 1  # digits of the site number, fastest first
    while base < form.sites:
        for s in divisors:
            if s % base == 0 and cell * s // base <= most:
                blocks = [block for block in reversed(divisors) if block % s == 0 and block > s]
                ring = next((block for block in blocks if _is_moved_onto_itself(form, s, block)), 0)
                block = ring or _open_block(form, s, blocks)
                if block:
                    break
        else:
            break
        shape += [s // base, block // s]
        closed.append(ring > 0)
        cell, base = cell * s // base, block
    if not shape or cell * form.sites // base > most:
        return None
    return PlaneWaves(form, (form.sites // base, *reversed(shape)), tuple(reversed(closed)))


def _is_moved_onto_itself(form: SiteForm, s: int, block: int) -> bool:
    """Whether the shift by s within blocks maps some rows of the form onto rows of the form: some where it wraps, and
    random ones.
    """

    def moved(i):
        return i - i % block + (i % block + s) % block

    def row(i):
        return slice(form.indptr[i], form.indptr[i + 1])

    couplings = form.weights if form.isotropic else form.blocks
    some = np.random.default_rng(0).integers(form.sites, size=24).tolist()
    for i in [block - 1, 0, block - s, form.sites - 1, form.sites - s, *some]:
        here, there = row(i), row(moved(i))
        neighbours = moved(form.neighbours[here].astype(np.int64))
        order = np.argsort(neighbours)
        if not np.array_equal(neighbours[order], form.neighbours[there]):
            return False
        pairs = [(couplings[here][order], couplings[there])]
        pairs += [(part[i], part[moved(i)]) for part in (form.diagonal, form.field) if len(part)]
        for one, other in pairs:
            if np.abs(one - other).max(initial=0.0) > SAME * np.abs(other).max(initial=0.0):
                return False
    return True


def _open_block(form: SiteForm, s: int, blocks: list[int]) -> int:
    """The largest block within which the shift by s, without wrapping, maps rows onto rows but for the ends of the
    block: a fourth of it at most on either side. 0 where there is none.
    """
    indptr, count = form.indptr, form.sites - s
    couplings = form.weights if form.isotropic else form.blocks

    def differs(rows):
        degree = np.diff(indptr)[rows]
        wrong = degree != np.diff(indptr)[rows + s]
        fine = np.flatnonzero(~wrong)
        degree = degree[fine]
        place = np.repeat(indptr[rows[fine]] - np.cumsum(degree) + degree, degree) + np.arange(degree.sum())
        there = place + np.repeat(indptr[rows[fine] + s] - indptr[rows[fine]], degree)
        unlike = _largest(couplings[place] - couplings[there]) > SAME * _largest(couplings[there])
        unlike |= form.neighbours[place].astype(np.int64) + s != form.neighbours[there]
        wrong[fine[np.repeat(np.arange(len(fine)), degree)[unlike]]] = True
        for part in (form.diagonal, form.field):
            if len(part):
                wrong |= _largest(part[rows] - part[rows + s]) > SAME * np.abs(part[rows]).max(initial=0.0)
        return wrong

    if count < 1 or differs(np.random.default_rng(0).integers(count, size=200)).mean() > 0.5:
        return 0
    chunks = [np.arange(low, min(low + 2**18, count)) for low in range(0, count, 2**18)]
    wrong = np.concatenate([np.flatnonzero(differs(rows)) + rows[0] for rows in chunks])
    for block in blocks:
        place = wrong % block
        if block >= 4 * s and not ((place >= block // 4) & (place + s < block - block // 4)).any():
            return block
    return 0


def _largest(values: np.ndarray) -> np.ndarray:
    """Largest modulus of every entry along the first axis."""
    return np.abs(values).max(axis=tuple(range(1, values.ndim)))


class PlaneWaves:
    """shape: digits of the site number, slowest first; every second one, from the second on, is that of a translation;
    closed: whether this translation wraps around.

    deviation: how far the couplings, on-site terms and fields are from being the same in every cell. It is infinite
    where other sites are coupled, as at an open boundary: then the waves are those of the lattice closed to a torus,
    and good for starts only.
    """

    def __init__(self, form: SiteForm, shape: tuple[int, ...], closed: tuple[bool, ...]):
        self.form, self.shape, self.closed = form, shape, closed
        self.periods, self.inner = shape[1::2], shape[0::2]
        self.translations, self.cell = math.prod(self.periods), math.prod(self.inner)
        self.rows = 1 if form.isotropic else 3
        digits = [np.full(self.cell, length // 2) for length in shape]
        digits[0::2] = np.unravel_index(np.arange(self.cell), self.inner)
        self.first = np.ravel_multi_index(digits, shape)  # the sites of a cell in the middle
        self.entries, couplings = self._keys(self.first)
        order = np.argsort(self.entries)
        self.entries, self.couplings = self.entries[order], couplings[order]
        self.degree = np.diff(form.indptr)[self.first]
        size = _largest(self.couplings)
        self.norm = self.rows * float(np.bincount(self._split(self.entries)[0], size, self.cell).max(initial=0.0))
        self.diagonal = form.diagonal[self.first] if len(form.diagonal) else np.zeros((self.cell, 3, 3))
        self.norm += 3 * float(np.abs(self.diagonal).max())
        self.deviation = self._deviation()

    @property
    def exact(self) -> bool:
        return self.deviation < math.inf

    def _digits(self, sites: np.ndarray) -> tuple[np.ndarray, tuple[np.ndarray, ...]]:
        """Number within the cell, and the digits of the translation."""
        digits = np.unravel_index(sites, self.shape)
        return np.ravel_multi_index(digits[0::2], self.inner), digits[1::2]

    def _keys(self, sites: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """One number per coupling of these sites, equal for couplings that a translation maps onto each other, and the
        couplings.
        """
        form = self.form
        start, degree = form.indptr[sites], np.diff(form.indptr)[sites]
        places = np.arange(degree.sum()) + np.repeat(start - np.concatenate([[0], np.cumsum(degree)[:-1]]), degree)
        cell, place = self._digits(sites)
        other, there = self._digits(form.neighbours[places].astype(np.int64))
        moves = tuple((b - np.repeat(a, degree)) % n for a, b, n in zip(place, there, self.periods, strict=True))
        keys = (np.repeat(cell, degree) * self.cell + other) * self.translations
        couplings = form.weights if form.isotropic else form.blocks
        return keys + np.ravel_multi_index(moves, self.periods), couplings[places]

    def _split(self, keys: np.ndarray) -> tuple[np.ndarray, np.ndarray, tuple[np.ndarray, ...]]:
        """Numbers within the cell of either site, and the shortest translations from the one to the other."""
        pair, move = np.divmod(keys, self.translations)
        moves = np.unravel_index(move, self.periods)
        moves = tuple((m + n // 2) % n - n // 2 for m, n in zip(moves, self.periods, strict=True))
        return *np.divmod(pair, self.cell), moves

    def _deviation(self) -> float:
        form, worst = self.form, 0.0
        if not len(self.entries):
            return math.inf
        for low in range(0, form.sites, 2**18):
            sites = np.arange(low, min(low + 2**18, form.sites))
            cell = self._digits(sites)[0]
            if not np.array_equal(np.diff(form.indptr)[sites], self.degree[cell]):
                return math.inf
            keys, couplings = self._keys(sites)
            places = np.minimum(np.searchsorted(self.entries, keys), len(self.entries) - 1)
            if not np.array_equal(self.entries[places], keys):
                return math.inf
            parts = [couplings - self.couplings[places]]
            parts += [part[sites] - part[self.first][cell] for part in (form.diagonal, form.field) if len(part)]
            worst = max(worst, *(float(np.abs(part).max(initial=0.0)) for part in parts))
        size = self.norm + np.abs(form.field).max(initial=0.0)
        return worst if worst <= SAME * size else math.inf

    def matrices(self, wavevectors: np.ndarray) -> np.ndarray:
        """The form between plane waves u_b exp(i q R) with q_d = 2 pi k_d / period_d, (K, c, c) for numbers k (K,
        directions); c components in a cell.
        """
        result = np.zeros((len(wavevectors), self.cell, self.rows, self.cell, self.rows), dtype=complex)
        here, there, moves = self._split(self.entries)
        for a, b, coupling, *move in zip(here, there, self.couplings, *moves, strict=True):
            phase = 1.0
            for k, m, period in zip(wavevectors.T, move, self.periods, strict=True):
                phase = phase * np.exp(2j * np.pi * (k * m % period / period))
            result[:, a, :, b, :] += phase[:, None, None] * np.reshape(coupling, (self.rows, self.rows))
        if self.rows == 3:
            for a in range(self.cell):
                result[:, a, :, a, :] += self.diagonal[a]
        return result.reshape(len(wavevectors), self.cell * self.rows, self.cell * self.rows)

    def _chunks(self) -> Iterator[np.ndarray]:
        step = max(1, AT_ONCE // (self.cell * self.rows) ** 2)
        for low in range(0, self.translations, step):
            numbers = np.arange(low, min(low + step, self.translations))
            yield np.stack(np.unravel_index(numbers, self.periods), axis=1)

    def levels(self, multipliers: np.ndarray | None = None) -> np.ndarray:
        """Lowest eigenvalue at every wavevector, of the form less `multipliers` (cell,) on its diagonal."""
        shift = np.repeat(np.zeros(self.cell) if multipliers is None else multipliers, self.rows)
        parts = []
        for wavevectors in self._chunks():
            matrices = self.matrices(wavevectors) - np.diag(shift)
            parts.append(matrices[:, 0, 0].real if len(shift) == 1 else np.linalg.eigvalsh(matrices)[:, 0])
        return np.concatenate(parts)

    def _rounding(self, size: float) -> float:
        """Bound of the error of eigenvalues of matrices of at most this norm: phases, sums, solver, unequal cells."""
        dimension = 3 * self.cell + 1
        error = (4 * dimension + 16 + len(self.entries)) * ROUNDING * size
        return error + 3 * (len(self.entries) + 4) * self.deviation

    def unshifted_bound(self) -> float:
        """A lower bound of f - constant: half the lowest eigenvalue at every site, and every site along its field;
        -infinity unless `exact`.
        """
        if not self.exact:
            return -math.inf
        lowest = float(self._levels.min()) - self._rounding(self.norm)
        fields = np.linalg.norm(self.form.field, axis=1).sum() if len(self.form.field) else 0.0
        return 0.5 * self.form.sites * lowest - float(fields) * (1 + 1e-12)

    def dual_bound(self, n: np.ndarray) -> float:
        """A lower bound of f, constant included, from the multipliers of the configuration n (N, 3), averaged over the
        translations; only if `exact`.
        """
        from manybody.classical.vector_sweeps import gradient

        form, count = self.form, self.translations
        field = form.field if len(form.field) else np.zeros((form.sites, 3))
        multipliers = np.empty(form.sites)
        gradient(np.ascontiguousarray(n), *form.arrays[:5], field, np.empty((form.sites, 3)), multipliers)
        multipliers = np.bincount(self._digits(np.arange(form.sites))[0], multipliers, self.cell) / count
        lowest, size = float(self.levels(multipliers).min()), self.norm + float(np.abs(multipliers).max())
        total, weight = count * math.fsum(multipliers), form.sites
        if len(form.field):
            # only the wave without change in space feels the field: there the homogenizing vector t is one more
            # component, in units of 1 / sqrt(translations)
            matrix = self.matrices(np.zeros((1, len(self.periods))))[0].real - np.diag(
                np.repeat(multipliers, self.rows)
            )
            matrix = np.kron(matrix, np.eye(3)) if self.rows == 1 else matrix
            h, along = field[self.first].reshape(-1), -float(np.vdot(field, n))
            matrix = np.block([[matrix, -h[:, None]], [-h[None], np.full((1, 1), -along / count)]])
            lowest = min(lowest, float(np.linalg.eigvalsh(matrix)[0]))
            size += float(np.abs(h).sum()) + abs(along) / count
            total, weight = total + along, weight + count
        total += weight * (lowest - self._rounding(size))
        return form.constant + 0.5 * (total - 8 * ROUNDING * (abs(total) + count * size * self.cell))

    def start(self, generator: np.random.Generator) -> np.ndarray:
        """(N, 3): of several random combinations of the lowest plane waves the one whose vectors are nearest to equal
        length.

        Some combine the waves of one wavevector, others those of several. Combining and normalizing in turn finds
        vectors of equal length where there are any.
        """
        levels = self._levels
        width = max(float(levels.max() - levels.min()), 1e-300)
        candidates = np.flatnonzero(levels <= levels.min() + 1e-10 * width)
        sample = generator.choice(self.form.sites, min(self.form.sites, SAMPLE), replace=False)
        best, worst = None, math.inf
        for k in range(8):
            count = min(1 if k % 2 == 0 else MOST_WAVES, len(candidates))
            chosen = np.stack(
                np.unravel_index(generator.choice(candidates, count, replace=False), self.periods), axis=1
            )
            modes = [mode for wavevector in chosen for mode in self._lowest(self._refined(wavevector), 1e-10 * width)]
            left, weights, right = np.linalg.svd(self._values(sample, modes), full_matrices=False)
            kept = weights > 1e-6 * weights[0]
            left, combine = left[:, kept], right[kept].T / weights[kept]
            shape = (len(sample), 3) if self.rows == 1 else (3 * len(sample), 1)
            x = normalized(generator.standard_normal((len(sample), 3)))
            for _ in range(60):
                part = left.T @ x.reshape(shape)
                raw = (left @ part).reshape(-1, 3)
                x = normalized(raw, fallback=x)
            uneven = float(np.mean((np.linalg.norm(raw, axis=1) - 1) ** 2))
            if uneven < 0.9 * worst:
                best, worst = (modes, combine @ part), uneven
        modes, factors = best
        parts = np.array_split(np.arange(self.form.sites), max(1, self.form.sites * len(modes) // AT_ONCE))
        x = normalized(np.concatenate([(self._values(p, modes) @ factors).reshape(-1, 3) for p in parts]))
        along = self.form.field.sum(axis=0)
        if self.rows == 1 and along.any():
            # spirals bend towards a field along their axis
            x = x @ Rotation.align_vectors(along[None], np.linalg.eigh(x.T @ x)[1][:, 0][None])[0].as_matrix().T
        return x

    def _refined(self, wavevector: np.ndarray) -> np.ndarray:
        """The wavevector nearby where the lowest level is lowest: in open directions it need not fit the period."""
        free = np.array([not closed for closed in self.closed])
        if not free.any():
            return wavevector

        def placed(numbers):
            result = wavevector.astype(float)
            result[free] = numbers
            return result

        def level(numbers):
            return float(np.linalg.eigvalsh(self.matrices(placed(numbers)[None]))[0, 0])

        start = wavevector[free].astype(float)
        simplex = np.concatenate([start[None], start + 0.5 * np.eye(len(start))])
        options = {"initial_simplex": simplex, "xatol": 1e-4, "fatol": 0.0, "maxiter": 400}
        return placed(minimize(level, start, method="Nelder-Mead", options=options).x)

    @functools.cached_property
    def _levels(self) -> np.ndarray:
        return self.levels()

    def _lowest(self, wavevector: np.ndarray, margin: float) -> list[tuple[np.ndarray, np.ndarray]]:
        """(wavevector, amplitudes (c,)) of its lowest waves."""
        energies, vectors = np.linalg.eigh(self.matrices(wavevector[None])[0])
        return [(wavevector, vectors[:, k]) for k in range(len(energies)) if energies[k] <= energies[0] + margin]

    def _values(self, sites: np.ndarray, modes: list) -> np.ndarray:
        """Real and imaginary parts of the waves on the sites, (sites * rows, 2 * modes)."""
        cell, place = self._digits(sites)
        columns = []
        for wavevector, amplitudes in modes:
            turns = np.zeros(len(sites))
            for k, at, period in zip(wavevector, place, self.periods, strict=True):
                turns += k * at % period / period
            wave = np.exp(2j * np.pi * turns)[:, None] * amplitudes.reshape(self.cell, self.rows)[cell]
            columns += [wave.real.reshape(-1), wave.imag.reshape(-1)]
        return np.stack(columns, axis=1)

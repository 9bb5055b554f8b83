"""Energy functions on a product of spheres: one object that both branches read.

An EnergyFunction is f(n_1, ..., n_N) = constant + sum of groups, for N unit vectors. A group holds all terms that
touch the same number of sites with the same ranks: site numbers (T, m) and coefficients
(T, 2 k_1 + 1, ..., 2 k_m + 1) over the real spherical harmonics of manybody.model.harmonics. Evaluation is compiled
once per function in manybody.model.evaluation.
"""

import functools
import hashlib
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse

from manybody.model import harmonics
from manybody.model.evaluation import Evaluation

Key = tuple[tuple[int, int], ...]
COMPILED_BATCH = 12_000  # numbers in a batch of configurations from which compiled code pays for being loaded


@dataclass(frozen=True, eq=False)
class Group:
    """Terms of one kind.

    key: ((rank, degree), ...), one pair per site of a term. The degree is that of the polynomial as written and
    matters to the rule `substitution` alone; rank <= degree, both of the same parity, for polynomials.
    sites: (T, m) site numbers; coefficients: (T, 2 k_1 + 1, ..., 2 k_m + 1).
    """

    key: Key
    sites: np.ndarray
    coefficients: np.ndarray

    @property
    def ranks(self) -> tuple[int, ...]:
        return tuple(rank for rank, _ in self.key)

    @property
    def terms(self) -> int:
        return len(self.sites)


class EnergyFunction:
    """A real function of N unit vectors; immutable.

    Raises ValueError for site numbers outside 0 ... N - 1, a site twice in one term, shapes that do not fit a key, and
    coefficients that are not finite.
    """

    def __init__(self, sites: int, constant: float = 0.0, groups: Iterable[Group] = ()):
        if int(sites) != sites or sites < 1:
            raise ValueError(f"an energy function needs at least one site, got {sites!r}")
        if not np.isfinite(constant):
            raise ValueError(f"the constant must be finite, got {constant!r}")
        self.sites = int(sites)
        self.constant = float(constant)
        self.groups: tuple[Group, ...] = _canonical(self.sites, groups)

    # Arithmetic

    def __add__(self, other):
        if isinstance(other, EnergyFunction):
            if other.sites != self.sites:
                raise ValueError(f"cannot add energy functions of {self.sites} and {other.sites} sites")
            return EnergyFunction(self.sites, self.constant + other.constant, self.groups + other.groups)
        if np.isscalar(other):
            return EnergyFunction(self.sites, self.constant + other, self.groups)
        return NotImplemented

    __radd__ = __add__

    def __mul__(self, number):
        if not np.isscalar(number):
            return NotImplemented
        groups = [Group(g.key, g.sites, number * g.coefficients) for g in self.groups]
        return EnergyFunction(self.sites, number * self.constant, groups)

    __rmul__ = __mul__

    def __truediv__(self, number):
        return self * (1.0 / number) if np.isscalar(number) else NotImplemented

    def __neg__(self):
        return self * -1.0

    def __sub__(self, other):
        return self + (-other)

    def __rsub__(self, other):
        return (-self) + other

    def __eq__(self, other):
        if not isinstance(other, EnergyFunction):
            return NotImplemented
        return self.fingerprint() == other.fingerprint()

    def __hash__(self):
        return hash(self.fingerprint())

    def allclose(self, other: "EnergyFunction", rtol: float = 1e-12, atol: float = 0.0) -> bool:
        """Whether all coefficients agree within rtol of the largest coefficient of either function, plus atol."""
        if other.sites != self.sites:
            return False
        tolerance = rtol * max(self.largest_coefficient, other.largest_coefficient) + atol
        rest = self - other
        return max(abs(rest.constant), rest.largest_coefficient) <= tolerance

    @property
    def largest_coefficient(self) -> float:
        """The largest modulus among the coefficients of the terms, the constant left out; 0 without terms."""
        return max((float(np.abs(g.coefficients).max()) for g in self.groups), default=0.0)

    def rescaled(self) -> tuple["EnergyFunction", int]:
        """(g, exponent): f = constant + 2^exponent g exactly, the largest coefficient of g between 2^-9 and 2^8."""
        exponent = math.frexp(self.largest_coefficient)[1]
        g = self if self.constant == 0.0 else self - self.constant
        if abs(exponent) <= 8:  # near enough; arithmetic on millions of terms takes its time
            return g, 0
        # In two steps where 2^-exponent itself may overflow.
        half = -exponent // 2 if abs(exponent) > 1000 else 0
        return (g * math.ldexp(1.0, half) if half else g) * math.ldexp(1.0, -exponent - half), exponent

    def fingerprint(self) -> str:
        """A hexadecimal digest of the content, equal in every process for equal functions."""
        return self._fingerprint

    @functools.cached_property
    def _fingerprint(self) -> str:
        digest = hashlib.sha256(repr((self.sites, self.constant + 0.0)).encode())
        for group in self.groups:
            digest.update(repr(group.key).encode())
            digest.update(np.ascontiguousarray(group.sites, dtype="<i8").tobytes())
            digest.update(np.ascontiguousarray(group.coefficients + 0.0, dtype="<f8").tobytes())
        return digest.hexdigest()

    def __repr__(self):
        kinds = ", ".join(f"{g.terms} x {'.'.join(str(k) for k in g.ranks)}" for g in self.groups)
        return f"EnergyFunction({self.sites} sites, constant {self.constant:g}, terms by rank: {kinds or 'none'})"

    # Values. The batch dimensions are whatever stands before the last two.

    @functools.cached_property
    def evaluation(self) -> Evaluation:
        return Evaluation(self.sites, self.constant, [(g.ranks, g.sites, g.coefficients) for g in self.groups])

    def value(self, n: np.ndarray) -> np.ndarray:
        """f at configurations n (..., N, 3) of unit vectors; returns (...)."""
        columns, shape = self._columns(n)
        return self.evaluation.value(columns).reshape(shape)[()]

    def gradient(self, n: np.ndarray) -> np.ndarray:
        """Riemannian (tangential) gradient at n (..., N, 3); same shape."""
        return self.value_and_gradient(n)[1]

    def value_and_gradient(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """f (...) and its Riemannian gradient (..., N, 3) at n (..., N, 3)."""
        n = self._checked(n)
        flat = n.reshape(-1, self.sites, 3)
        values, gradients = np.empty(len(flat)), np.empty(flat.shape)
        if not self.evaluation.higher and len(flat) >= 4 and flat.size >= COMPILED_BATCH:
            from manybody.model.batch_kernels import value_and_gradient

            matrix = self.evaluation.matrix
            form = matrix.indptr, matrix.indices, matrix.data, self.evaluation.linear
            value_and_gradient(np.ascontiguousarray(flat), *form, values, gradients)
            values += self.evaluation.constant
            return values.reshape(n.shape[:-2])[()], gradients.reshape(n.shape)
        # In slices of the batch whose scratch arrays stay in the cache, and in memory that is not given back each time.
        step = max(8, 12288 // (3 * self.sites))
        for start in range(0, len(flat), step):
            part = slice(start, start + step)
            values[part], columns = self.evaluation.value_and_gradient(self._columns(flat[part])[0])
            gradients[part] = np.moveaxis(columns, 2, 0)
        return values.reshape(n.shape[:-2])[()], gradients.reshape(n.shape)

    def hessian(self, n: np.ndarray) -> np.ndarray:
        """Riemannian Hessian (..., 3 N, 3 N) at n (..., N, 3), ambient, with normal directions annihilated."""
        n = self._checked(n)
        flat = n.reshape(-1, self.sites, 3)
        dense = np.empty((len(flat), 3 * self.sites, 3 * self.sites))
        for matrix, configuration in zip(dense, flat, strict=True):
            matrix[...] = self.evaluation.hessian(configuration).toarray()
        return dense.reshape(*n.shape[:-2], 3 * self.sites, 3 * self.sites)

    def hessian_sparse(self, n: np.ndarray) -> sparse.csr_array:
        """As `hessian` for one configuration n (N, 3), as a sparse matrix."""
        n = self._checked(n)
        if n.ndim != 2:
            raise ValueError(f"hessian_sparse takes one configuration of shape ({self.sites}, 3), got {n.shape}")
        return self.evaluation.hessian(n)

    def hessian_product(self, n: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Riemannian Hessian at n times v, both (..., N, 3); v is projected onto the tangent space first."""
        columns, shape = self._columns(n)
        directions, _ = self._columns(v)
        return self._rows(self.evaluation.hessian_product(columns, directions), shape)

    def _checked(self, n: np.ndarray) -> np.ndarray:
        n = np.asarray(n, dtype=float)
        if n.shape[-2:] != (self.sites, 3):
            raise ValueError(f"configurations must have shape (..., {self.sites}, 3), got {n.shape}")
        return n

    def _columns(self, n: np.ndarray) -> tuple[np.ndarray, tuple[int, ...]]:
        """(..., N, 3) -> (N, 3, B) contiguous, the layout in which sparse products are fast, and the batch shape."""
        n = self._checked(n)
        return np.ascontiguousarray(np.moveaxis(n.reshape(-1, self.sites, 3), 0, 2)), n.shape[:-2]

    def _rows(self, columns: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
        return np.ascontiguousarray(np.moveaxis(columns, 2, 0)).reshape(*shape, self.sites, 3)

    # Structure

    @property
    def mean(self) -> float:
        """Average over the product of spheres, f_mean: the constant and all terms of rank 0 at every site."""
        return self.constant + sum(float(g.coefficients.sum()) for g in self.groups if not any(g.ranks))

    @property
    def is_quadratic(self) -> bool:
        """Whether f is a polynomial of total degree at most 2 in the unit vectors."""
        return all(sum(g.ranks) <= 2 for g in self.groups)

    def quadratic_form(self) -> tuple[sparse.csr_array, np.ndarray, float]:
        """(M, h, c) with f = 1/2 x^T M x - h.x + c on the product of spheres, x = n.reshape(3 N).

        M (3 N, 3 N) is sparse and symmetric, with traceless diagonal blocks. Raises ValueError unless `is_quadratic`.
        """
        if not self.is_quadratic:
            worst = max(self.groups, key=lambda g: sum(g.ranks))
            raise ValueError(f"not a quadratic energy function: it has terms of ranks {worst.ranks}")
        return self.evaluation.matrix, -self.evaluation.linear, self.evaluation.constant

    def rotated(self, rotation: np.ndarray) -> "EnergyFunction":
        """g(n) = f(R^-1 n) for one proper rotation R (3, 3) of all sites or one per site (N, 3, 3)."""
        rotation = np.asarray(rotation, dtype=float)
        each = np.broadcast_to(rotation, (self.sites, 3, 3))
        groups = []
        for group in self.groups:
            tensor = group.coefficients
            for slot, rank in enumerate(group.ranks):
                if rank == 0:
                    continue
                if rotation.ndim == 2:
                    matrices = harmonics.rotation_matrix(rank, rotation)[None]
                else:
                    matrices = harmonics.rotation_matrix(rank, each)[group.sites[:, slot]]
                # f(R^-1 n): coefficients c . C(R^-1 n) = c . D^T C(n), so c becomes D c in this slot.
                moved = np.moveaxis(tensor, slot + 1, -1)
                moved = np.einsum(
                    "t...p,tqp->t...q", moved, np.broadcast_to(matrices, (group.terms, *matrices.shape[1:]))
                )
                tensor = np.moveaxis(moved, -1, slot + 1)
            groups.append(Group(group.key, group.sites, tensor))
        return EnergyFunction(self.sites, self.constant, groups)

    def symmetry_axes(self, tolerance: float = 1e-10) -> np.ndarray:
        """Orthonormal axes (r, 3), r = 0, 1 or 3: rotating all vectors together about them leaves f unchanged.

        `tolerance` is relative to the norm of the coefficients.
        """
        triangle, norm = np.zeros((0, 3)), 0.0
        # Couplings of 1e-300 and 1e300 must survive being squared in norms.
        unit = self.largest_coefficient or 1.0
        for group in self.groups:
            for coefficients in _slices(group.coefficients):
                coefficients = coefficients / unit
                change = np.zeros((3, *coefficients.shape))
                for slot, rank in enumerate(group.ranks):
                    moved = np.moveaxis(coefficients, slot + 1, -1)
                    turned = np.einsum("t...q,aqp->at...p", moved, harmonics.generators(rank))
                    change += np.moveaxis(turned, -1, slot + 2)
                stacked = np.concatenate([triangle, change.reshape(3, -1).T])
                triangle = np.linalg.qr(stacked, mode="r") if len(stacked) > 3 else stacked
                norm = np.hypot(norm, np.linalg.norm(coefficients))
        if norm == 0.0:
            return np.eye(3)
        _, strength, axes = np.linalg.svd(np.concatenate([triangle, np.zeros((3, 3))]) / norm)
        kept = axes[strength <= tolerance]
        if len(kept) != 1:
            # Two generators of the rotation group make the third: two kept axes are a borderline third one.
            return np.eye(3) if len(kept) else np.zeros((0, 3))
        axis = kept[0]
        axis = np.where(np.abs(axis) < 1e-12, 0.0, axis * np.sign(axis[np.argmax(np.abs(axis))]))
        return (axis / np.linalg.norm(axis))[None]

    def restricted(self, keep: Sequence[int]) -> "EnergyFunction":
        """The terms wholly inside the sites `keep`, renumbered in that order; the constant is left out."""
        keep = np.asarray(keep, dtype=np.int64)
        number = np.full(self.sites, -1)
        number[keep] = np.arange(len(keep))
        groups = []
        for group in self.groups:
            sites = number[group.sites]
            inside = (sites >= 0).all(axis=1)
            groups.append(Group(group.key, sites[inside], group.coefficients[inside]))
        return EnergyFunction(len(keep), 0.0, groups)

    def components(self) -> list[np.ndarray]:
        """Sorted site numbers of each connected cluster, ordered by smallest site; uncoupled sites stand alone."""
        links = [g.sites[:, [0, slot]] for g in self.groups for slot in range(1, g.sites.shape[1])]
        links = np.concatenate(links) if links else np.zeros((0, 2), dtype=np.int64)
        graph = sparse.csr_array((np.ones(len(links)), (links[:, 0], links[:, 1])), shape=(self.sites, self.sites))
        _, label = sparse.csgraph.connected_components(graph, directed=False)
        order = np.argsort(label, kind="stable")
        parts = np.split(order, np.flatnonzero(np.diff(label[order])) + 1)
        return sorted(parts, key=lambda part: part[0])

    def scaled(self, factor) -> "EnergyFunction":
        """Terms multiplied by factor(key, sites (T, m)) -> (T,) or a number; the constant is kept."""
        groups = []
        for group in self.groups:
            factors = np.broadcast_to(factor(group.key, group.sites), (group.terms,))
            factors = factors.reshape(-1, *[1] * (group.coefficients.ndim - 1))
            groups.append(Group(group.key, group.sites, factors * group.coefficients))
        return EnergyFunction(self.sites, self.constant, groups)


def _slices(coefficients: np.ndarray, length: int = 65536):
    """The terms in slices, for scratch arrays that stay small; equal terms, as on a uniform lattice, stand in one."""
    terms = len(coefficients)
    if terms > length and (coefficients == coefficients[0]).all():
        yield coefficients[:1] * math.sqrt(terms)
        return
    for start in range(0, terms, length):
        yield coefficients[start : start + length]


def _canonical(sites: int, groups: Iterable[Group]) -> tuple[Group, ...]:
    """Sites ascending inside every term, equal terms merged, zero terms dropped, groups and terms in sorted order."""
    collected: dict[Key, list[tuple[np.ndarray, np.ndarray]]] = {}
    constant_key: Key = ()
    for group in groups:
        _check(sites, group)
        # A factor of rank 0 and degree 0 is the number 1: its site is not touched.
        kept = [slot for slot, pair in enumerate(group.key) if pair != (0, 0)]
        if len(kept) < len(group.key):
            shape = [2 * group.key[slot][0] + 1 for slot in kept]
            key = tuple(group.key[slot] for slot in kept)
            if key == constant_key:
                raise ValueError("a term that touches no site belongs into the constant")
            group = Group(key, group.sites[:, kept], group.coefficients.reshape(group.terms, *shape))
        for key, part in _sites_ascending(group):
            collected.setdefault(key, []).append(part)
    merged = []
    for key in sorted(collected):
        parts = collected[key]
        numbers = np.concatenate([part[0] for part in parts])
        coefficients = np.concatenate([part[1] for part in parts])
        if len(numbers) == 0:
            continue
        order = np.lexsort(numbers.T[::-1])
        numbers, coefficients = numbers[order], coefficients[order]
        first = np.flatnonzero(np.concatenate([[True], (np.diff(numbers, axis=0) != 0).any(axis=1)]))
        if len(first) < len(numbers):
            numbers, coefficients = numbers[first], np.add.reduceat(coefficients, first, axis=0)
        alive = coefficients.reshape(len(numbers), -1).any(axis=1)
        if alive.any():
            numbers, coefficients = numbers[alive], coefficients[alive]
            numbers.setflags(write=False)
            coefficients.setflags(write=False)
            merged.append(Group(key, numbers, coefficients))
    return tuple(merged)


def _check(sites: int, group: Group) -> None:
    numbers, coefficients = np.asarray(group.sites), np.asarray(group.coefficients)
    if numbers.ndim != 2 or numbers.shape[1] != len(group.key):
        raise ValueError(
            f"sites of a term with key {group.key} must have shape (terms, {len(group.key)}), got {numbers.shape}"
        )
    expected = (len(numbers), *[2 * rank + 1 for rank, _ in group.key])
    if coefficients.shape != expected:
        raise ValueError(f"coefficients of key {group.key} must have shape {expected}, got {coefficients.shape}")
    if not np.isfinite(coefficients).all():
        raise ValueError(f"coefficients of key {group.key} must be finite")
    if numbers.size and (numbers.min() < 0 or numbers.max() >= sites):
        raise ValueError(f"a term names site {numbers.min() if numbers.min() < 0 else numbers.max()} of {sites} sites")
    ordered = np.sort(numbers, axis=1)
    if (ordered[:, 1:] == ordered[:, :-1]).any():
        raise ValueError("a term names the same site twice: multiply its polynomials at that site first")


def _sites_ascending(group: Group) -> list[tuple[Key, tuple[np.ndarray, np.ndarray]]]:
    numbers = np.asarray(group.sites, dtype=np.int64)
    coefficients = np.asarray(group.coefficients, dtype=float)
    order = np.argsort(numbers, axis=1)
    result = []
    for permutation in np.unique(order, axis=0):
        chosen = (order == permutation).all(axis=1)
        key = tuple(group.key[slot] for slot in permutation)
        turned = coefficients[chosen].transpose(0, *(permutation + 1))
        result.append((key, (numbers[chosen][:, permutation], turned)))
    return result

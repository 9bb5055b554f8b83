"""Fast values and derivatives of an energy function.

Everything of total degree at most 2 becomes one sparse matrix and one vector in the Cartesian components, so that a
batch costs one sparse product. Terms of higher rank or with more sites are contracted over the harmonics of their
sites. Configurations come as columns (N, 3, B): B is the batch.
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from manybody.model.harmonics import CARTESIAN, derivative, harmonics

Terms = tuple[tuple[int, ...], np.ndarray, np.ndarray]
"""Ranks (m,), site numbers (T, m) and coefficients (T, 2 k_1 + 1, ..., 2 k_m + 1)."""


class Evaluation:
    """The compiled form: f = constant + linear . x + 1/2 x^T matrix x + higher terms, x = columns as (3 N, B)."""

    def __init__(self, sites: int, constant: float, terms: list[Terms]):
        self.sites = sites
        self.constant = constant
        self.linear = np.zeros(3 * sites)
        self.higher: list[Contraction] = []
        rows, columns, values = [], [], []
        for ranks, numbers, coefficients in terms:
            kept = [slot for slot, rank in enumerate(ranks) if rank > 0]
            ranks = tuple(ranks[slot] for slot in kept)
            numbers = numbers[:, kept]
            coefficients = coefficients.reshape(len(numbers), *[2 * rank + 1 for rank in ranks])
            if not ranks:
                self.constant += float(coefficients.sum())
            elif ranks == (1,):
                np.add.at(self.linear, (3 * numbers + CARTESIAN).ravel(), coefficients.ravel())
            elif ranks in {(1, 1), (2,)}:
                if ranks == (2,):
                    # C_2q(n) = 1/2 n^T B_q n with constant symmetric B_q, the second derivatives of the solid harmonic.
                    blocks = np.tensordot(coefficients, second_derivative(2)[..., 0], axes=(1, 2))
                    numbers = numbers[:, [0, 0]]
                else:
                    blocks = coefficients[:, CARTESIAN.argsort()[:, None], CARTESIAN.argsort()]
                    rows.append(_block_index(numbers[:, 1], 0))
                    columns.append(_block_index(numbers[:, 0], 1))
                    values.append(blocks.transpose(0, 2, 1).ravel())
                rows.append(_block_index(numbers[:, 0], 0))
                columns.append(_block_index(numbers[:, 1], 1))
                values.append(blocks.ravel())
            else:
                self.higher.append(Contraction(sites, ranks, numbers, coefficients))
        self.matrix = _assemble(3 * sites, rows, columns, values)

    def value(self, n: np.ndarray) -> np.ndarray:
        """n (N, 3, B) -> (B,)."""
        return self._value_and_euclidean(n, gradient=False)[0]

    def value_and_gradient(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """n (N, 3, B) -> values (B,), Riemannian gradients (N, 3, B)."""
        values, gradient = self._value_and_euclidean(n)
        return values, _tangential(n, gradient)

    def _value_and_euclidean(self, n: np.ndarray, gradient: bool = True) -> tuple[np.ndarray, np.ndarray]:
        x = n.reshape(3 * self.sites, -1)
        field = self.matrix @ x
        values = self.constant + self.linear @ x + 0.5 * np.einsum("xb,xb->b", field, x)
        field += self.linear[:, None]
        field = field.reshape(n.shape)
        for term in self.higher:
            values += term.value(n)
            if gradient:
                field += term.gradient(n)
        return values, field

    def hessian(self, configuration: np.ndarray) -> sparse.csr_array:
        """Riemannian Hessian (3 N, 3 N) at (N, 3): P H P - (n . gradient) P, P the tangent projection."""
        n = configuration[..., None]
        _, field = self._value_and_euclidean(n)
        radial = np.einsum("nab,nab->n", n, field)
        euclidean = self.matrix
        for term in self.higher:
            euclidean = euclidean + term.hessian(configuration)
        tangent = np.eye(3) - configuration[:, :, None] * configuration[:, None, :]
        every = np.arange(self.sites)
        rows, columns = _block_index(every, 0), _block_index(every, 1)
        projection = _assemble(3 * self.sites, [rows], [columns], [tangent.ravel()])
        curvature = _assemble(3 * self.sites, [rows], [columns], [(radial[:, None, None] * tangent).ravel()])
        return sparse.csr_array(projection @ euclidean @ projection - curvature)

    def hessian_product(self, n: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Riemannian Hessian at n times the tangential part of v, both (N, 3, B)."""
        _, field = self._value_and_euclidean(n)
        radial = np.einsum("nab,nab->nb", n, field)[:, None]
        v = _tangential(n, v)
        product = (self.matrix @ v.reshape(3 * self.sites, -1)).reshape(n.shape)
        for term in self.higher:
            product += term.hessian_product(n, v)
        return _tangential(n, product) - radial * v


@dataclass
class Contraction:
    """Terms that do not fit the quadratic form, contracted over the harmonics of their sites."""

    sites: int
    ranks: tuple[int, ...]
    numbers: np.ndarray
    coefficients: np.ndarray

    def __post_init__(self):
        terms = len(self.numbers)
        self.scatter = [
            sparse.csr_array((np.ones(terms), (self.numbers[:, slot], np.arange(terms))), shape=(self.sites, terms))
            for slot in range(len(self.ranks))
        ]

    def value(self, n: np.ndarray) -> np.ndarray:
        left = self._contract(self._harmonics(n), keep=(0,))
        return np.einsum("tqb,tqb->b", left, self._harmonics(n, only=0)[0])

    def gradient(self, n: np.ndarray) -> np.ndarray:
        """Euclidean gradient (N, 3, B) of the solid-harmonic extension."""
        values = self._harmonics(n)
        total = np.zeros(n.shape)
        for slot, rank in enumerate(self.ranks):
            outer = self._contract(values, keep=(slot,))
            inner = harmonics(rank - 1, self._at(n, slot))
            local = np.einsum("tqb,aqp,tbp->tab", outer, derivative(rank), inner, optimize=True)
            total += self._scattered(slot, local)
        return total

    def hessian(self, configuration: np.ndarray) -> sparse.csr_array:
        """Euclidean Hessian (3 N, 3 N) of the solid-harmonic extension at one configuration (N, 3)."""
        rows, columns, values = [], [], []
        for first, second, block in self._hessian_blocks(configuration[..., None]):
            rows.append(_block_index(self.numbers[:, first], 0))
            columns.append(_block_index(self.numbers[:, second], 1))
            values.append(block[..., 0].ravel())
        return _assemble(3 * self.sites, rows, columns, values)

    def hessian_product(self, n: np.ndarray, v: np.ndarray) -> np.ndarray:
        total = np.zeros(n.shape)
        for first, second, block in self._hessian_blocks(n):
            total += self._scattered(first, np.einsum("tacb,tcb->tab", block, v[self.numbers[:, second]]))
        return total

    def _hessian_blocks(self, n: np.ndarray):
        """(slot, slot, blocks (T, 3, 3, B)) of second derivatives."""
        values = self._harmonics(n)
        slopes = [
            np.einsum("aqp,tbp->tqab", derivative(rank), harmonics(rank - 1, self._at(n, slot)))
            for slot, rank in enumerate(self.ranks)
        ]
        for first, rank in enumerate(self.ranks):
            if rank >= 2:
                outer = self._contract(values, keep=(first,))
                inner = harmonics(rank - 2, self._at(n, first))
                yield (
                    first,
                    first,
                    np.einsum("tqb,acqp,tbp->tacb", outer, second_derivative(rank), inner, optimize=True),
                )
            for second in range(len(self.ranks)):
                if second != first:
                    outer = self._contract(values, keep=(first, second))
                    yield (
                        first,
                        second,
                        np.einsum("tqpb,tqab,tpcb->tacb", outer, slopes[first], slopes[second], optimize=True),
                    )

    def _at(self, n: np.ndarray, slot: int) -> np.ndarray:
        """Vectors of one slot, (T, B, 3)."""
        return np.moveaxis(n[self.numbers[:, slot]], 1, 2)

    def _harmonics(self, n: np.ndarray, only: int | None = None) -> list[np.ndarray]:
        slots = range(len(self.ranks)) if only is None else [only]
        return [np.moveaxis(harmonics(self.ranks[slot], self._at(n, slot)), 2, 1) for slot in slots]

    def _contract(self, values: list[np.ndarray], keep: tuple[int, ...]) -> np.ndarray:
        """Coefficients contracted with the harmonics of every slot but those kept (in that order): (T, kept..., B)."""
        batch = len(self.ranks) + 1
        operands = [self.coefficients, [0, *range(1, batch)]]
        for slot, value in enumerate(values):
            if slot not in keep:
                operands += [value, [0, slot + 1, batch]]
        kept = [slot + 1 for slot in keep]
        if len(operands) == 2:
            tensor = np.einsum(*operands, [0, *kept])
            return np.broadcast_to(tensor[..., None], (*tensor.shape, values[0].shape[-1]))
        return np.einsum(*operands, [0, *kept, batch], optimize=len(operands) > 4)

    def _scattered(self, slot: int, local: np.ndarray) -> np.ndarray:
        """Sum (T, 3, B) onto the sites of a slot: (N, 3, B)."""
        return (self.scatter[slot] @ local.reshape(len(local), -1)).reshape(self.sites, *local.shape[1:])


def second_derivative(rank: int) -> np.ndarray:
    """(3, 3, 2 rank + 1, 2 rank - 3): d2 C_rank / dn_a dn_b = D[a, b] C_(rank-2) as solid harmonics; rank >= 2."""
    matrix = np.einsum("aqp,bpr->abqr", derivative(rank), derivative(rank - 1))
    return (matrix + matrix.swapaxes(0, 1)) / 2


def _tangential(n: np.ndarray, v: np.ndarray) -> np.ndarray:
    return v - n * np.einsum("nab,nab->nb", n, v)[:, None]


def _block_index(numbers: np.ndarray, axis: int) -> np.ndarray:
    """Row (axis 0) or column (axis 1) indices of 3 x 3 blocks at sites `numbers`, in the order of blocks.ravel()."""
    local = np.arange(9) // 3 if axis == 0 else np.arange(9) % 3
    return (3 * numbers[:, None] + local).ravel()


def _assemble(size: int, rows: list, columns: list, values: list) -> sparse.csr_array:
    if not rows:
        return sparse.csr_array((size, size))
    values, rows, columns = np.concatenate(values), np.concatenate(rows), np.concatenate(columns)
    nonzero = np.flatnonzero(values)
    index = np.int32 if size < 2**31 else np.int64
    parts = (values[nonzero], (rows[nonzero].astype(index), columns[nonzero].astype(index)))
    return sparse.csr_array(sparse.coo_array(parts, shape=(size, size)))

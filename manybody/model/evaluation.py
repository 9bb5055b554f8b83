"""Fast values and derivatives of an energy function.

Three layers: everything of total degree at most 2 is one sparse matrix and one vector in the Cartesian components;
other terms of one or two sites are one sparse matrix and one vector over the harmonics of all sites; terms of more
sites are contracted one kind after the other. Configurations come as columns (N, 3, B): B is the batch.
"""

import functools
from collections import defaultdict

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
        rows, columns, values = [], [], []
        few: list[Terms] = []
        many: dict[tuple[int, ...], list] = defaultdict(list)
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
                # Zeros, most of an isotropic block, are dropped before they cost memory three times over.
                place = np.flatnonzero(blocks)
                row = _index_type(3 * numbers[place // 9, 0] + place % 9 // 3, sites)
                column = _index_type(3 * numbers[place // 9, 1] + place % 3, sites)
                value = blocks.ravel()[place]
                rows.append(row)
                columns.append(column)
                values.append(value)
                if ranks == (1, 1):
                    rows.append(column)
                    columns.append(row)
                    values.append(value)
            elif len(ranks) <= 2:
                few.append((ranks, numbers, coefficients))
            else:
                many[ranks].append((numbers, coefficients))
        self.matrix = _assemble(3 * sites, rows, columns, values)
        self.higher: list[HarmonicForm | Contraction] = [HarmonicForm(sites, few)] if few else []
        for ranks, parts in many.items():
            numbers, coefficients = (np.concatenate(part) for part in zip(*parts, strict=True))
            self.higher.append(Contraction(sites, ranks, numbers, coefficients))

    def value(self, n: np.ndarray) -> np.ndarray:
        """n (N, 3, B) -> (B,)."""
        x = n.reshape(3 * self.sites, -1)
        values = self.constant + self.linear @ x + 0.5 * np.einsum("xb,xb->b", self.matrix @ x, x)
        for term in self.higher:
            values += term.value(n)
        return values

    def value_and_gradient(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """n (N, 3, B) -> values (B,), Riemannian gradients (N, 3, B)."""
        values, gradient, radial = self._value_and_euclidean(n)
        _subtract_along(gradient, n, radial)
        return values, gradient

    def _value_and_euclidean(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Values (B,), Euclidean gradients (N, 3, B) and their radial parts (N, B)."""
        x = n.reshape(3 * self.sites, -1)
        field = (self.matrix @ x).reshape(n.shape)
        radial = _dot(n, field)
        values = self.constant + 0.5 * radial.sum(axis=0)
        if self.linear.any():
            values += self.linear @ x
            linear = self.linear.reshape(-1, 3, 1)
            field += linear
            radial += _dot(n, linear)
        for term in self.higher:
            value, slope = term.value_and_gradient(n)
            values += value
            field += slope
            radial += _dot(n, slope)
        return values, field, radial

    def hessian(self, configuration: np.ndarray) -> sparse.csr_array:
        """Riemannian Hessian (3 N, 3 N) at (N, 3): P H P - (n . gradient) P, P the tangent projection."""
        radial = self._value_and_euclidean(np.ascontiguousarray(configuration)[..., None])[2][:, 0]
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
        radial = self._value_and_euclidean(n)[2][:, None]
        v = _tangential(n, v)
        product = (self.matrix @ v.reshape(3 * self.sites, -1)).reshape(n.shape)
        for term in self.higher:
            product += term.hessian_product(n, v)
        return _tangential(n, product) - radial * v


class HarmonicForm:
    """Terms of one or two sites as field . y + 1/2 y^T matrix y, y the harmonics of all sites, rank after rank."""

    def __init__(self, sites: int, terms: list[Terms]):
        self.sites = sites
        self.ranks = sorted({rank for ranks, _, _ in terms for rank in ranks})
        sizes = [sites * (2 * rank + 1) for rank in self.ranks]
        self.offsets = dict(zip(self.ranks, np.cumsum([0, *sizes]), strict=False))
        self.size = sum(sizes)
        self.field = np.zeros(self.size)
        rows, columns, values = [], [], []
        for ranks, numbers, coefficients in terms:
            index = [self._index(rank, numbers[:, slot]) for slot, rank in enumerate(ranks)]
            if len(ranks) == 1:
                np.add.at(self.field, index[0].ravel(), coefficients.ravel())
                continue
            left, right = np.broadcast_arrays(index[0][:, :, None], index[1][:, None, :])
            rows += [left.ravel(), right.ravel()]
            columns += [right.ravel(), left.ravel()]
            values += [coefficients.ravel(), coefficients.ravel()]
        self.matrix = _assemble(self.size, rows, columns, values)

    def _index(self, rank: int, numbers: np.ndarray) -> np.ndarray:
        """Places in y of the harmonics of sites `numbers` (T,): (T, 2 rank + 1)."""
        width = 2 * rank + 1
        return self.offsets[rank] + width * numbers[:, None] + np.arange(width)

    def _harmonics(self, n: np.ndarray) -> np.ndarray:
        """y (size, B) at n (N, 3, B)."""
        vectors = np.moveaxis(n, 1, 2)
        return np.concatenate([np.moveaxis(harmonics(k, vectors), 2, 1).reshape(-1, n.shape[2]) for k in self.ranks])

    def _local(self, y: np.ndarray, rank: int) -> np.ndarray:
        """The part of one rank, (N, 2 rank + 1, B)."""
        width = 2 * rank + 1
        start = self.offsets[rank]
        return y[start : start + self.sites * width].reshape(self.sites, width, -1)

    def _slopes(self, n: np.ndarray) -> dict[int, np.ndarray]:
        """d C_k / d n_a at every site, by rank: (N, 2 k + 1, 3, B)."""
        vectors = np.moveaxis(n, 1, 2)
        return {k: np.einsum("aqp,nbp->nqab", derivative(k), harmonics(k - 1, vectors)) for k in self.ranks}

    def _curvatures(self, n: np.ndarray, conjugate: np.ndarray) -> np.ndarray:
        """Second derivatives within each site, (N, 3, 3, B), for df/dy = conjugate (size, B)."""
        vectors = np.moveaxis(n, 1, 2)
        total = np.zeros((self.sites, 3, 3, n.shape[2]))
        for k in self.ranks:
            if k >= 2:
                total += _curvature(k, self._local(conjugate, k), vectors)
        return total

    def value(self, n: np.ndarray) -> np.ndarray:
        y = self._harmonics(n)
        return self.field @ y + 0.5 * np.einsum("yb,yb->b", self.matrix @ y, y)

    def value_and_gradient(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values (B,) and Euclidean gradients (N, 3, B) of the solid-harmonic extension."""
        y = self._harmonics(n)
        conjugate = self.matrix @ y
        values = self.field @ y + 0.5 * np.einsum("yb,yb->b", conjugate, y)
        conjugate += self.field[:, None]
        vectors = np.moveaxis(n, 1, 2)
        gradient = np.zeros(n.shape)
        for k in self.ranks:
            gradient += _pulled_back(k, self._local(conjugate, k), vectors)
        return values, gradient

    def hessian(self, configuration: np.ndarray) -> sparse.csr_array:
        """Euclidean Hessian (3 N, 3 N) of the solid-harmonic extension at one configuration (N, 3)."""
        n = configuration[..., None]
        conjugate = self.matrix @ self._harmonics(n) + self.field[:, None]
        every = np.arange(self.sites)
        rows, columns, values = [], [], []
        for k, slope in self._slopes(n).items():
            index = self._index(k, every)
            rows.append(np.repeat(index, 3, axis=1).ravel())
            columns.append(np.broadcast_to(3 * every[:, None, None] + np.arange(3), slope.shape[:3]).ravel())
            values.append(slope[..., 0].ravel())
        shape = (self.size, 3 * self.sites)
        triplets = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
        jacobian = sparse.csr_array(sparse.coo_array(triplets, shape=shape))
        local = self._curvatures(n, conjugate)[..., 0].ravel()
        own = _assemble(3 * self.sites, [_block_index(every, 0)], [_block_index(every, 1)], [local])
        return sparse.csr_array(jacobian.T @ self.matrix @ jacobian + own)

    def hessian_product(self, n: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Euclidean Hessian at n times v, both (N, 3, B)."""
        conjugate = self.matrix @ self._harmonics(n) + self.field[:, None]
        slopes = self._slopes(n)
        moved = [np.einsum("nqab,nab->nqb", slopes[k], v).reshape(-1, n.shape[2]) for k in self.ranks]
        reaction = self.matrix @ np.concatenate(moved)
        total = np.einsum("nacb,ncb->nab", self._curvatures(n, conjugate), v)
        for k in self.ranks:
            total += np.einsum("nqab,nqb->nab", slopes[k], self._local(reaction, k))
        return total


class Contraction:
    """Terms of three or more sites, contracted over the harmonics of their sites."""

    def __init__(self, sites: int, ranks: tuple[int, ...], numbers: np.ndarray, coefficients: np.ndarray):
        self.sites, self.ranks, self.numbers, self.coefficients = sites, ranks, numbers, coefficients
        terms = len(numbers)
        self.scatter = [
            sparse.csr_array((np.ones(terms), (numbers[:, slot], np.arange(terms))), shape=(sites, terms))
            for slot in range(len(ranks))
        ]

    def value(self, n: np.ndarray) -> np.ndarray:
        values = self._harmonics(n)
        return np.einsum("tqb,tqb->b", self._contract(values, keep=(0,)), values[0])

    def value_and_gradient(self, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values (B,) and Euclidean gradients (N, 3, B) of the solid-harmonic extension."""
        values = self._harmonics(n)
        total, result = np.zeros(n.shape), None
        for slot, rank in enumerate(self.ranks):
            outer = self._contract(values, keep=(slot,))
            if slot == 0:
                result = np.einsum("tqb,tqb->b", outer, values[0])
            total += self._scattered(slot, _pulled_back(rank, outer, self._at(n, slot)))
        return result, total

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
                yield first, first, _curvature(rank, self._contract(values, keep=(first,)), self._at(n, first))
            for second in range(len(self.ranks)):
                if second != first:
                    half = np.einsum("tqpb,tqab->tapb", self._contract(values, keep=(first, second)), slopes[first])
                    yield first, second, np.einsum("tapb,tpcb->tacb", half, slopes[second])

    def _at(self, n: np.ndarray, slot: int) -> np.ndarray:
        """Vectors of one slot, (T, B, 3)."""
        return np.moveaxis(n[self.numbers[:, slot]], 1, 2)

    def _harmonics(self, n: np.ndarray) -> list[np.ndarray]:
        """Harmonics of every slot, (T, 2 k + 1, B)."""
        return [np.moveaxis(harmonics(rank, self._at(n, slot)), 2, 1) for slot, rank in enumerate(self.ranks)]

    def _contract(self, values: list[np.ndarray], keep: tuple[int, ...]) -> np.ndarray:
        """Coefficients contracted with the harmonics of every slot but those kept (in that order): (T, kept..., B)."""
        batch = len(self.ranks) + 1
        tensor, axes = self.coefficients, [0, *range(1, batch)]
        # One slot after the other: for so few operands the search for a better order costs more than it saves.
        for slot in range(len(self.ranks)):
            if slot not in keep:
                left = [axis for axis in axes if axis not in (slot + 1, batch)]
                tensor = np.einsum(tensor, axes, values[slot], [0, slot + 1, batch], [*left, batch])
                axes = [*left, batch]
        return np.einsum(tensor, axes, [0, *[slot + 1 for slot in keep], batch])

    def _scattered(self, slot: int, local: np.ndarray) -> np.ndarray:
        """Sum (T, 3, B) onto the sites of a slot: (N, 3, B)."""
        return (self.scatter[slot] @ local.reshape(len(local), -1)).reshape(self.sites, *local.shape[1:])


@functools.cache
def second_derivative(rank: int) -> np.ndarray:
    """(3, 3, 2 rank + 1, 2 rank - 3): d2 C_rank / dn_a dn_b = D[a, b] C_(rank-2) as solid harmonics; rank >= 2."""
    matrix = np.einsum("aqp,bpr->abqr", derivative(rank), derivative(rank - 1))
    return (matrix + matrix.swapaxes(0, 1)) / 2


def _pulled_back(rank: int, outer: np.ndarray, vectors: np.ndarray) -> np.ndarray:
    """Gradient (T, 3, B) of outer . C_rank(n): outer (T, 2 rank + 1, B), vectors n (T, B, 3)."""
    if rank == 1:
        return outer[:, CARTESIAN.argsort()]
    lowered = np.einsum("aqp,tqb->tapb", derivative(rank), outer)
    return np.einsum("tapb,tbp->tab", lowered, harmonics(rank - 1, vectors))


def _curvature(rank: int, outer: np.ndarray, vectors: np.ndarray) -> np.ndarray:
    """Second derivatives (T, 3, 3, B) of outer . C_rank(n), shapes as in `_pulled_back`; rank >= 2."""
    lowered = np.einsum("acqp,tqb->tacpb", second_derivative(rank), outer)
    return np.einsum("tacpb,tbp->tacb", lowered, harmonics(rank - 2, vectors))


def _tangential(n: np.ndarray, v: np.ndarray) -> np.ndarray:
    result = v.copy()
    _subtract_along(result, n, _dot(n, v))
    return result


# An operation on a whole batch allocates fresh memory pages each time, which costs more than the arithmetic: these two
# reuse one scratch array.


def _dot(n: np.ndarray, v: np.ndarray) -> np.ndarray:
    """n . v at every site, (N, B) for (N, 3, B)."""
    total = n[:, 0] * v[:, 0]
    scratch = np.empty_like(total)
    for a in (1, 2):
        total += np.multiply(n[:, a], v[:, a], out=scratch)
    return total


def _subtract_along(v: np.ndarray, n: np.ndarray, radial: np.ndarray) -> None:
    """v -= n radial, in place: v and n (N, 3, B), radial (N, B)."""
    scratch = np.empty_like(radial)
    for a in range(3):
        v[:, a] -= np.multiply(n[:, a], radial, out=scratch)


def _block_index(numbers: np.ndarray, axis: int) -> np.ndarray:
    """Row (axis 0) or column (axis 1) indices of 3 x 3 blocks at sites `numbers`, in the order of blocks.ravel()."""
    local = np.arange(9) // 3 if axis == 0 else np.arange(9) % 3
    return (3 * numbers[:, None] + local).ravel()


def _assemble(size: int, rows: list, columns: list, values: list) -> sparse.csr_array:
    if not rows:
        return sparse.csr_array((size, size))
    values, rows, columns = np.concatenate(values), np.concatenate(rows), np.concatenate(columns)
    if not values.all():
        nonzero = np.flatnonzero(values)
        values, rows, columns = values[nonzero], rows[nonzero], columns[nonzero]
    indices = _index_type(rows, size), _index_type(columns, size)
    return sparse.csr_array(sparse.coo_array((values, indices), shape=(size, size)))


def _index_type(numbers: np.ndarray, size: int) -> np.ndarray:
    """Indices in the narrowest type that holds the number of components of `size` sites."""
    return numbers.astype(np.int32 if 3 * size < 2**31 else np.int64, copy=False)

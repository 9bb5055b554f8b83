"""A quantized operator applied without its matrix, where that would not fit the memory.

Cut into a left and a right half, the operator is H_L + H_R + diagonal + sum_k A_k B_k with sparse matrices on the
halves. A vector becomes one dense block per left charge (a single block without conservation), and every product acts
by small sparse times dense multiplications.
"""

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import LinearOperator

from manybody.quantum.basis import Basis
from manybody.quantum.ladder import Shift, Shifts
from manybody.quantum.operators import diagonal_of


class SplitOperator(LinearOperator):
    """The operator of given shifts on a basis that they do not leave; vectors as for manybody.quantum.operators."""

    def __init__(self, parts: Shifts, basis: Basis):
        super().__init__(float if parts.real else complex, (basis.dimension, basis.dimension))
        self.diagonal = diagonal_of(parts, basis)
        moves = [term for term in parts.terms if not term.diagonal]
        left = [term for term in moves if term.sites[-1] < basis.cut]
        right = [term for term in moves if term.sites[0] >= basis.cut]
        across = [term for term in moves if term.sites[0] < basis.cut <= term.sites[-1]]
        left_half = _Half(basis.dims[: basis.cut], 0)
        right_half = _Half(basis.dims[basis.cut :], basis.cut)
        products = [
            (left_half.matrix(a, self.dtype), right_half.matrix(b, self.dtype)) for a, b in _products(across, basis)
        ]
        if left:
            products.append((left_half.matrix(left, self.dtype), None))
        if right:
            products.append((None, right_half.matrix(right, self.dtype)))
        self._blocks, self._where = self._split(basis)
        self._pieces = [piece for a, b in products for piece in self._cut(a, b, basis)]

    def _split(self, basis: Basis):
        """[(left codes, right codes)] per block, and where each block's entries stand in a vector."""
        blocks, where = [], []
        for first in np.unique(basis.right_first[basis.left_counts > 0]):
            lefts = np.flatnonzero((basis.right_first == first) & (basis.left_counts > 0))
            count = int(basis.left_counts[lefts[0]])
            blocks.append((lefts, basis.right_order[first : first + count]))
            where.append((basis.left_start[lefts][:, None] + np.arange(count)).astype(np.int32))
        return blocks, where

    def _cut(self, a, b, basis: Basis):
        """Blocks (target, source, A or None, B or None) of one product that are not empty."""
        for source, (lefts, rights) in enumerate(self._blocks):
            columns_a = None if a is None else a[:, lefts]
            columns_b = None if b is None else b[:, rights]
            for target, (new_lefts, new_rights) in enumerate(self._blocks):
                if (a is None or b is None) and target != source:
                    continue
                block_a = None if a is None else columns_a[new_lefts]
                block_b = None if b is None else columns_b[new_rights]
                if all(block is None or block.nnz for block in (block_a, block_b)):
                    yield target, source, block_a, block_b

    def _matvec(self, x: np.ndarray) -> np.ndarray:
        x = np.asarray(x).reshape(-1)
        blocks = [x[where] for where in self._where]
        kind = np.result_type(x, self.dtype)
        results = [(self.diagonal[w] * block).astype(kind) for w, block in zip(self._where, blocks, strict=True)]
        for target, source, a, b in self._pieces:
            moved = blocks[source] if a is None else a @ blocks[source]
            results[target] += moved if b is None else (b @ moved.T).T
        y = np.empty(self.shape[0], dtype=kind)
        for where, result in zip(self._where, results, strict=True):
            y[where] = result
        return y

    def _adjoint(self):
        return self


def split_bytes(dimension: float, half: float, real: bool) -> float:
    """Memory of a SplitOperator at work: index, diagonal and five vectors, and matrices on the halves."""
    item = 8 if real else 16
    return dimension * (4 + 6 * item) + 200 * item * half


class _Half:
    """Sparse matrices over all states of one half."""

    def __init__(self, dims: tuple[int, ...], first_site: int):
        self.dims, self.first = dims, first_site

    def matrix(self, terms: list[Shift], dtype) -> sparse.csr_array:
        size = int(np.prod(self.dims, dtype=np.int64)) if self.dims else 1
        codes = np.arange(size)
        total = sparse.csr_array((size, size), dtype=dtype)
        for term in terms:
            flat, target = 0, codes
            for site, step, d in zip(term.sites, term.steps, term.amplitude.shape, strict=True):
                stride = int(np.prod(self.dims[site - self.first + 1 :], dtype=np.int64))
                flat = flat * d + (codes // stride) % d
                target = target - step * stride
            values = term.amplitude.reshape(-1)[flat]
            kept = values != 0
            total = total + sparse.csr_array(
                (values[kept], (target[kept], codes[kept])), shape=(size, size), dtype=dtype
            )
        return sparse.csr_array(total)


def _products(across: list[Shift], basis: Basis):
    """Yields ([left shift], [right shifts]) whose products sum to the given shifts, few of them.

    Shifts with the same part in one half are gathered; a singular value decomposition of their amplitudes gives the
    fewest products.
    """
    left_keys = {_part(term, basis, left=True) for term in across}
    by_left = len(left_keys) <= len({_part(term, basis, left=False) for term in across})
    gathered: dict[tuple, list[Shift]] = {}
    for term in across:
        gathered.setdefault(_part(term, basis, left=by_left), []).append(term)
    for (sites, steps), terms in gathered.items():
        matrices, others = [], []
        for term in terms:
            split = sum(site < basis.cut for site in term.sites)
            shape = term.amplitude.shape
            matrix = term.amplitude.reshape(int(np.prod(shape[:split])), -1)
            matrices.append(matrix if by_left else matrix.T)
            others.append(
                (term.sites[split:], term.steps[split:], shape[split:])
                if by_left
                else (term.sites[:split], term.steps[:split], shape[:split])
            )
        own_shape = tuple(basis.dims[site] for site in sites)
        stacked = np.concatenate(matrices, axis=1)
        u, s, v = np.linalg.svd(stacked, full_matrices=False)
        # No rounding errors where the target of a step does not exist.
        u[~stacked.any(axis=1)] = 0.0
        v[:, ~stacked.any(axis=0)] = 0.0
        for k in range(int((s > 1e-15 * s[0]).sum())):
            own = [Shift(sites, steps, u[:, k].reshape(own_shape))]
            parts, at = [], 0
            for matrix, (other_sites, other_steps, shape) in zip(matrices, others, strict=True):
                row = (s[k] * v[k, at : at + matrix.shape[1]]).reshape(shape)
                parts.append(Shift(other_sites, other_steps, row))
                at += matrix.shape[1]
            yield (own, parts) if by_left else (parts, own)


def _part(term: Shift, basis: Basis, left: bool) -> tuple:
    chosen = [(site, step) for site, step in zip(term.sites, term.steps, strict=True) if (site < basis.cut) == left]
    return tuple(site for site, _ in chosen), tuple(step for _, step in chosen)

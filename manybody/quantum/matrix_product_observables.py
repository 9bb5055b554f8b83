"""Moments, pair correlations, entanglement and coherent overlap of a matrix-product state; names as in
GroundState.observables."""

import math

import numpy as np
from scipy.optimize import minimize

from manybody.model.spin_matrices import coherent_states, spin_matrices
from manybody.quantum import blocks, contraction
from manybody.quantum.chain import Bond
from manybody.quantum.compiled import compiled
from manybody.quantum.matrix_product_state import MatrixProductState

LADDER = np.array([[0.5, 0.5, 0.0], [-0.5j, 0.5j, 0.0], [0.0, 0.0, 1.0]])
"""(x, y, z) from (S^+, S^-, S^z)."""


def matrix_product_observables(
    state: MatrixProductState, names: tuple[str, ...], start: np.ndarray | None = None, seed: int = 1
) -> dict[str, np.ndarray]:
    """Observables by the names of manybody.quantum.result, "moments" with moments_squared and coherent_overlap.

    start (N, 3): classical unit vectors in the frame of the operator from which, beside random ones, the best coherent
    product state is looked for. Cost: N^2 products of the size of one site for correlations, N otherwise.
    """
    result: dict[str, np.ndarray] = {}
    if not set(names) & {"moments", "correlations", "entanglement"}:
        return result
    walk = _walk(state, "correlations" in names)
    back = np.empty(state.sites, np.int64)
    back[state.order] = np.arange(state.sites)
    turn = np.swapaxes(state.frames, 1, 2)
    spins = state.spins
    if "moments" in names:
        result["moments"] = np.einsum("iab,ib->ia", turn, walk.first[back]) / spins[:, None]
        squared = np.einsum("iab,ibc,idc->iad", turn, walk.second[back], turn)
        result["moments_squared"] = squared / (spins * spins)[:, None, None]
        directions = None if start is None else np.einsum("iab,ib->ia", state.frames, start)[state.order]
        result["coherent_overlap"] = np.array(coherent_overlap(state, directions, seed))
    if "correlations" in names:
        pairs = walk.pairs[np.ix_(back, back)]
        result["correlations"] = (
            np.einsum("iab,ijbc,jdc->ijad", turn, pairs, turn) / np.multiply.outer(spins, spins)[:, :, None, None]
        )
    if "entanglement" in names:
        result["entanglement"] = walk.entropy
        result["entanglement_order"] = state.order
    return result


class _walk:
    """Averages collected while the centre moves from one end to the other; sweep order, solved frame.

    first (N, 3), second (N, 3, 3) one-site averages, entropy (N - 1,), pairs (N, N, 3, 3) with the one-site averages at
    i = j.
    """

    def __init__(self, state: MatrixProductState, with_pairs: bool):
        length = state.sites
        self.first, self.second = np.zeros((length, 3)), np.zeros((length, 3, 3))
        self.entropy = np.zeros(length - 1)
        ladder_pairs = np.zeros((length, length, 3, 3), complex)
        conserved = any(local.any() for local in state.local)
        centre = state.tensors[0]
        channels = _Channels(centre.dtype, conserved)
        for k in range(length):
            left, right, local = state.bonds[k], state.bonds[k + 1], state.local[k]
            left = self._left if k else left
            spin = state.spins[state.order[k]]
            matrices = np.array(spin_matrices(spin))
            density = _density(centre, left, right, local)
            # Products of spin matrices are formed before the cut to the levels kept.
            kept = slice(local.size)
            self.first[k] = np.einsum("aij,ji->a", matrices[:, kept, kept], density).real
            products = np.einsum("aij,bjk->abik", matrices, matrices)[:, :, kept, kept]
            self.second[k] = np.einsum("abik,ki->ab", products, density).real
            self.second[k] = (self.second[k] + self.second[k].T) / 2
            if with_pairs:
                ladder = _ladder(spin, local.size)
                if k:
                    values = channels.values(centre, left, right, local, ladder)
                    ladder_pairs[:k, k] = values.reshape(k, 3, 3)
            if k + 1 < length:
                isometry, carry, weights, kept_dims = _split(centre, left, right, local)
                weights = weights[weights > 1e-300]
                self.entropy[k] = max(0.0, -float(weights @ np.log(weights)))
                new = Bond(right.charges[kept_dims > 0], kept_dims[kept_dims > 0])
                tensor = blocks.scatter_left(isometry, *left.pair, *new.pair, local)
                if with_pairs:
                    channels.extend(tensor, left, new, local, ladder)
                after = state.bonds[k + 2]
                widths = blocks.by_left(*right.pair, *after.pair, state.local[k + 1])[2]
                centre = _carry(carry, kept_dims, right.dims, state.tensors[k + 1], widths)
                self._left = new
        if with_pairs:
            upper = np.einsum("ab,ijbc,dc->ijad", LADDER, ladder_pairs, LADDER).real
            self.pairs = upper + upper.transpose(1, 0, 3, 2)
            diagonal = np.arange(length)
            self.pairs[diagonal, diagonal] = self.second


def _ladder(spin: float, levels: int) -> np.ndarray:
    """(3, levels, levels): S^+, S^-, S^z, real."""
    x, y, z = spin_matrices(spin)
    return np.ascontiguousarray(np.array([(x + 1j * y).real, (x - 1j * y).real, z.real])[:, :levels, :levels])


def _density(tensor, left: Bond, right: Bond, local) -> np.ndarray:
    """One-site density matrix from the centre tensor."""
    target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
    density = np.zeros((local.size, local.size), tensor.dtype)
    for i in range(left.charges.size):
        matrix = tensor[start[i] : start[i] + left.dims[i] * width[i]].reshape(left.dims[i], width[i])
        for s in range(local.size):
            for t in range(local.size):
                j = target[i, s]
                if j >= 0 and target[i, t] == j:
                    a = matrix[:, column[i, s] : column[i, s] + right.dims[j]]
                    b = matrix[:, column[i, t] : column[i, t] + right.dims[j]]
                    density[s, t] += np.vdot(b, a)
    return density


def _split(tensor, left: Bond, right: Bond, local):
    """Isometry, carry, squared singular values and dims of the bond after the centre, nothing cut."""
    from manybody.quantum import split

    matrices = blocks.gather_right(tensor, *left.pair, *right.pair, local)
    _, height = blocks.by_right(*left.pair, right.charges, local)
    shapes = np.stack((height, right.dims), axis=1)
    weights = split.spectra(matrices, shapes, 0, 0.0)[0]
    isometry, carry, kept = split.orthonormal(matrices, shapes)
    return isometry, carry, weights / weights.sum(), kept


def _carry(carry, kept, dims, tensor, widths):
    from manybody.quantum import split

    return split.carry_over(carry, kept, dims, tensor, widths)


class _Channels:
    """Left environments of every S^+_i, S^-_i, S^z_i with i left of the centre; channel 0 is the identity."""

    def __init__(self, dtype, conserved: bool):
        self.dtype = dtype
        self.steps = np.array([1, -1, 0] if conserved else [0, 0, 0], np.int64)
        self.delta = np.zeros(1, np.int64)
        self.environment = np.zeros(0, dtype)

    def values(self, centre, left: Bond, right: Bond, local, ladder) -> np.ndarray:
        """(channels, 3): <channel operator times S^+, S^-, S^z at the centre>."""
        operator = (self.delta, self.delta, 0, -1, np.zeros((0, 4), np.int64), np.zeros(0, self.dtype))
        steps = contraction.plan(left.pair, right.pair, local, operator, -1, 0, right.pair)
        by_ket = np.empty_like(self.environment)
        blocks.to_ket(self.environment, *left.pair, self.delta, 0, by_ket)
        return _pair_values(centre, by_ket, steps, *left.pair, *right.pair, local, self.delta, ladder)

    def extend(self, tensor, left: Bond, right: Bond, local, ladder) -> None:
        old = self.delta.size
        delta = np.concatenate([self.delta, self.steps])
        entries, weights = [], []
        for channel in range(1, old):
            entries.extend((channel, channel, s, s) for s in range(local.size))
            weights.extend([1.0] * local.size)
        for a in range(3):
            rows, columns = np.nonzero(ladder[a])
            entries.extend((0, old + a, s, t) for s, t in zip(rows.tolist(), columns.tolist(), strict=True))
            weights.extend(ladder[a][rows, columns].tolist())
        operator = (self.delta, delta, 0, -1, np.array(entries, np.int64), np.array(weights, self.dtype))
        scratch = np.empty(0, self.dtype)
        self.environment, _ = contraction.environment(
            tensor, self.environment, left.pair, right.pair, local, operator, scratch
        )
        self.delta = delta


@compiled
def _pair_values(tensor, environment, steps, left, left_dims, right, right_dims, local, delta, ladder):
    target, column, width, start, _ = blocks.by_left(left, left_dims, right, right_dims, local)
    bra_of, row, height, _, _ = blocks.by_ket(left, left_dims, delta, 0)
    middle = np.empty(steps[6][1], tensor.dtype)
    contraction.multiply(tensor, environment, middle, steps[0])
    values = np.zeros((delta.size - 1, 3), tensor.dtype)
    origin = 0
    for i in range(left.size):
        for a in range(1, delta.size):
            k = bra_of[a, i]
            if k < 0:
                continue
            for b in range(3):
                for s in range(local.size):
                    for t in range(local.size):
                        weight = ladder[b, s, t]
                        j = target[i, t]
                        if weight == 0.0 or j < 0 or target[k, s] != j:
                            continue
                        total = values[a - 1, b] * 0
                        for x in range(left_dims[k]):
                            u = origin + (row[a, i] + x) * width[i] + column[i, t]
                            v = start[k] + x * width[k] + column[k, s]
                            for y in range(right_dims[j]):
                                total += np.conj(tensor[v + y]) * middle[u + y]
                        values[a - 1, b] += weight * total
        origin += height[i] * width[i]
    return values


def coherent_overlap(
    state: MatrixProductState, start: np.ndarray | None = None, seed: int = 1, random_starts: int = 3
) -> float:
    """max |<n_1 ... n_N | psi>|^(2/N) over coherent product states, as found from `start` (N, 3), in sweep order and
    solved frame, and from random directions. With W = <n| S_i |psi> / <n|psi> the gradient of log |<n|psi>|^2 along n_i
    is 2 n_i x Im W."""
    length = state.sites
    random = np.random.default_rng(seed)
    starts = [random.standard_normal((length, 3)) for _ in range(random_starts)]
    if start is not None:
        # Slightly tilted, since a state of fixed charge can be orthogonal to the classical configuration itself.
        starts.insert(0, start + 0.05 * random.standard_normal((length, 3)))
    tensors = [_matrices(state, k) for k in range(length)]
    spins = state.spins[state.order]
    matrices = [np.array(spin_matrices(s))[:, :, : local.size] for s, local in zip(spins, state.local, strict=True)]

    def objective(flat: np.ndarray):
        x = flat.reshape(length, 3)
        size = np.linalg.norm(x, axis=1, keepdims=True)
        n = x / size
        bras = [coherent_states(v, s).conj() for v, s in zip(n, spins.tolist(), strict=True)]
        log, weak = _contract(tensors, bras, matrices, state)
        if not np.isfinite(log):
            return 700.0, np.zeros(flat.shape)
        return -log, -(2 * np.cross(n, weak.imag) / size).reshape(-1)

    lowest = min(float(minimize(objective, s.reshape(-1), jac=True, method="L-BFGS-B").fun) for s in starts)
    return math.exp(-max(lowest, 0.0) / length)


def _matrices(state: MatrixProductState, position: int) -> list[tuple[int, int, int, np.ndarray]]:
    """(left charge, local state, right charge, block) of a site."""
    left, right, local = state.bonds[position], state.bonds[position + 1], state.local[position]
    target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
    result = []
    for i in range(left.charges.size):
        matrix = state.tensors[position][start[i] : start[i] + left.dims[i] * width[i]].reshape(-1, max(width[i], 1))
        for s in range(local.size):
            j = target[i, s]
            if j >= 0:
                result.append((i, s, int(j), matrix[:, column[i, s] : column[i, s] + right.dims[j]]))
    return result


def _contract(tensors, bras, matrices, state: MatrixProductState):
    """log |<n|psi>|^2 and the weak values (N, 3) from the two partial contractions at every site."""
    length = len(tensors)
    number = np.result_type(complex)
    lefts = [[np.ones(1, number)]]
    scale = 0.0
    for k in range(length):
        dims = state.bonds[k + 1].dims
        following = [np.zeros(d, number) for d in dims]
        for i, s, j, block in tensors[k]:
            following[j] += bras[k][s] * (lefts[-1][i] @ block)
        norm = math.sqrt(sum(float(np.vdot(v, v).real) for v in following))
        if norm == 0.0:
            return -np.inf, None
        scale += math.log(norm)
        lefts.append([v / norm for v in following])
    rights = [np.ones(1, number)]
    weak = np.zeros((length, 3), number)
    for k in reversed(range(length)):
        local = np.zeros(state.local[k].size, number)
        following = [np.zeros(d, number) for d in state.bonds[k].dims]
        for i, s, j, block in tensors[k]:
            moved = block @ rights[j]
            local[s] += lefts[k][i] @ moved
            following[i] += bras[k][s] * moved
        weak[k] = (matrices[k] @ local) @ bras[k] / (bras[k][: local.size] @ local)
        norm = math.sqrt(sum(float(np.vdot(v, v).real) for v in following)) or 1.0
        rights = [v / norm for v in following]
    return 2 * scale, weak

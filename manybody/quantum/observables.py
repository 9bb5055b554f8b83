"""Observables of an exact ground state: moments, pair correlations, entanglement, overlap with coherent product
states.
"""

import math

import numpy as np
from scipy.optimize import minimize

from manybody.model.spin_matrices import coherent_states, spin_matrices
from manybody.quantum.basis import Basis, sector_dimensions, sector_index

_CHUNK = 2**22  # amplitudes held at once


def exact_observables(state, names: tuple[str, ...], start: np.ndarray | None = None, seed: int = 1) -> dict:
    """Observables of a SectorState by the names of manybody.quantum.result; conventions of GroundState.observables.

    "moments" comes with moments_squared and coherent_overlap. start (N, 3): classical unit vectors in the original
    frame, from which the best coherent product state is looked for, beside random ones.
    """
    turn = np.swapaxes(state.rotations, 1, 2)
    spins = state.basis.spins
    observables: dict[str, np.ndarray] = {}
    if "moments" in names or "correlations" in names:
        first, second = _site_averages(state)
    if "moments" in names:
        observables["moments"] = np.einsum("iab,ib->ia", turn, first) / spins[:, None]
        observables["moments_squared"] = (
            np.einsum("iab,ibc,idc->iad", turn, second, turn) / (spins * spins)[:, None, None]
        )
        turned = None if start is None else np.einsum("iab,ib->ia", state.rotations, start)
        observables["coherent_overlap"] = np.array(coherent_overlap(state.vector, state.basis, turned, seed))
    if "correlations" in names:
        pairs = _sector_pairs(state) if state.basis.sector is not None else _full_pairs(state)
        sites = np.arange(len(spins))
        pairs[sites, sites] = second
        observables["correlations"] = (
            np.einsum("iab,ijbc,jdc->ijad", turn, pairs, turn) / np.multiply.outer(spins, spins)[:, :, None, None]
        )
    if "entanglement" in names:
        observables["entanglement"] = entanglement(state.vector, state.basis)
        observables["entanglement_order"] = np.arange(len(spins))
    return observables


def entanglement(vector: np.ndarray, basis: Basis) -> np.ndarray:
    """Von Neumann entropy (N - 1,), natural logarithm, between sites 0 ... k and the others for every k."""
    sites = len(basis.dims)
    left, right = basis.codes(0, basis.dimension)
    charge = np.zeros(basis.dimension, dtype=np.int16)
    entropies = np.zeros(sites - 1)
    conserved = basis.sector is not None
    for k in range(1, sites):
        if conserved:
            charge += basis.digit(k - 1, left, right)
            need = sector_index(basis.spins, basis.sector)
            after = sector_dimensions(basis.spins[k:])
            order = np.argsort(charge, kind="stable")
            counts = np.bincount(charge)
            blocks, at = [], 0
            # The states of one left charge are all combinations of its left and right parts, in ascending order.
            for c in np.flatnonzero(counts):
                block = vector[order[at : at + counts[c]]].reshape(-1, int(after[need - c]))
                blocks.append(block)
                at += counts[c]
        else:
            blocks = [vector.reshape(math.prod(basis.dims[:k]), -1)]
        weights = np.concatenate([_schmidt_weights(block) for block in blocks])
        weights = weights[weights > 0]
        entropies[k - 1] = max(0.0, -float(weights @ np.log(weights)))
    return entropies


def _schmidt_weights(block: np.ndarray) -> np.ndarray:
    """Squared singular values, from the smaller Gram matrix; below 1e-16 they do not count."""
    if block.shape[0] > block.shape[1]:
        block = block.T
    return np.linalg.eigvalsh(block @ block.conj().T)


def _site_averages(state) -> tuple[np.ndarray, np.ndarray]:
    """<S_i> (N, 3) and symmetrized <S_a S_b> (N, 3, 3) in the frame of the state, from one-site density matrices."""
    basis, vector = state.basis, state.vector
    first = np.zeros((len(basis.dims), 3))
    second = np.zeros((len(basis.dims), 3, 3))
    weights = np.abs(vector) ** 2
    if basis.sector is not None:
        left, right = basis.codes(0, basis.dimension)
    for i, d in enumerate(basis.dims):
        if basis.sector is None:
            block = vector.reshape(math.prod(basis.dims[:i]), d, -1)
            density = np.einsum("lar,lbr->ab", block, block.conj(), optimize=True)
        else:
            density = np.diag(np.bincount(basis.digit(i, left, right), weights, d))
        matrices = np.array(spin_matrices(basis.spins[i]))
        first[i] = np.einsum("aij,ji->a", matrices, density).real
        second[i] = np.einsum("aij,bjk,ki->ab", matrices, matrices, density, optimize=True).real
    return first, second


def _sector_pairs(state) -> np.ndarray:
    """<S_i^a S_j^b> (N, N, 3, 3) in a sector of conserved S^z; the diagonal i = j is left to one-site averages."""
    basis, vector = state.basis, state.vector
    sites = len(basis.dims)
    along = np.zeros((sites, sites))
    across = np.zeros((sites, sites), dtype=complex)
    rows = max(1, _CHUNK // sites)
    for at in range(0, basis.dimension, rows):
        left, right = basis.codes(at, at + rows)
        m = np.array([basis.spins[i] - basis.digit(i, left, right) for i in range(sites)])
        along += (m * np.abs(vector[at : at + len(left)]) ** 2) @ m.T
    top = float(np.sum(basis.spins))
    if basis.sector > -top:
        # <S_i^+ S_j^-> = <S_i^- psi | S_j^- psi>, row by row of the sector below.
        below = Basis(basis.spins, basis.sector - 1)
        for at in range(0, below.dimension, rows):
            left, right = below.codes(at, at + rows)
            lowered = np.array([_raised(below, basis, vector, i, left, right) for i in range(sites)])
            across += lowered.conj() @ lowered.T
    pairs = np.zeros((sites, sites, 3, 3))
    pairs[:, :, 0, 0] = pairs[:, :, 1, 1] = across.real / 2
    pairs[:, :, 1, 0], pairs[:, :, 0, 1] = across.imag / 2, -across.imag / 2
    pairs[:, :, 2, 2] = along
    return pairs


def _raised(below: Basis, basis: Basis, vector, site: int, left, right) -> np.ndarray:
    """(S_site^- psi) at states of the sector below, given by their codes there."""
    spin, digit = basis.spins[site], below.digit(site, left, right)
    possible = digit > 0
    m = spin - digit  # of the target; the source has m + 1
    factor = np.sqrt(np.where(possible, spin * (spin + 1) - m * (m + 1), 0.0))
    step = basis.stride(site)
    if site < basis.cut:
        left = np.where(possible, left - step, left)
    else:
        right = np.where(possible, right - step, right)
    index = np.where(possible, basis.index(left, right), 0)
    return factor * vector[np.minimum(index, basis.dimension - 1)]


def _full_pairs(state) -> np.ndarray:
    """<S_i^a S_j^b> (N, N, 3, 3), symmetrized at i = j, of a state on the whole space."""
    basis, vector = state.basis, state.vector
    sites = len(basis.dims)
    size = len(vector)

    def moved(i: int) -> np.ndarray:
        block = vector.reshape(math.prod(basis.dims[:i]), basis.dims[i], -1)
        return np.array([np.einsum("ab,lbr->lar", s, block).reshape(-1) for s in spin_matrices(basis.spins[i])])

    together = max(1, min(sites, 64 * _CHUNK // (3 * size)))
    pairs = np.zeros((sites, sites, 3, 3))
    for low in range(0, sites, together):
        own = np.array([moved(i) for i in range(low, min(sites, low + together))]).reshape(-1, size)
        for j in range(sites):
            product = own.conj() @ moved(j).T
            pairs[low : low + together, j] = product.real.reshape(-1, 3, 3)
    return pairs


def coherent_overlap(
    vector: np.ndarray, basis: Basis, start: np.ndarray | None, seed: int, random_starts: int = 3
) -> float:
    """max |<n_1 ... n_N | psi>|^(2/N) over coherent product states, as found from `start` (N, 3) and random starts.

    With W = <n| S_i |psi> / <n|psi>, the gradient of log |<n|psi>|^2 along n_i is 2 n_i x Im W.
    """
    sites = len(basis.dims)
    random = np.random.default_rng(seed)
    starts = [random.standard_normal((sites, 3)) for _ in range(random_starts)]
    if start is not None:
        # Slightly tilted, since a sector state can be orthogonal to the classical configuration itself.
        starts.insert(0, start + 0.05 * random.standard_normal((sites, 3)))
    contraction = _Contraction(vector, basis)

    def objective(flat):
        x = flat.reshape(sites, 3)
        length = np.linalg.norm(x, axis=1, keepdims=True)
        n = x / length
        value, weak = contraction(n)
        if value == 0:
            return 700.0, np.zeros(flat.shape)
        gradient = 2 * np.cross(n, weak.imag) / length
        return -2 * math.log(value), -gradient.reshape(-1)

    lowest = min(float(minimize(objective, s.reshape(-1), jac=True, method="L-BFGS-B").fun) for s in starts)
    return math.exp(-max(lowest, 0.0) / sites)


class _Contraction:
    """|<n|psi>| and the weak values <n|S_i|psi> / <n|psi> (N, 3), by contracting one half after the other."""

    def __init__(self, vector: np.ndarray, basis: Basis):
        self.vector, self.basis = vector, basis
        self.left, self.right = basis.codes(0, basis.dimension)
        self.occupied = np.flatnonzero(basis.left_counts)
        self.matrices = [np.array(spin_matrices(s)) for s in basis.spins]

    def __call__(self, n: np.ndarray) -> tuple[float, np.ndarray]:
        basis, cut = self.basis, self.basis.cut
        states = [coherent_states(n[i], spin).conj() for i, spin in enumerate(basis.spins)]
        left, right = _product(states[:cut]), _product(states[cut:])
        on_left = np.zeros(basis.left_size, dtype=complex)
        terms = self.vector * right[self.right]
        on_left[self.occupied] = np.add.reduceat(terms, basis.left_start[self.occupied])
        terms = self.vector * left[self.left]
        on_right = np.bincount(self.right, terms.real, basis.right_size) + 1j * np.bincount(
            self.right, terms.imag, basis.right_size
        )
        value = left @ on_left
        if abs(value) < 1e-150:
            return 0.0, np.zeros((len(states), 3), dtype=complex)
        vectors = _environments(on_left, states[:cut]) + _environments(on_right, states[cut:])
        weak = [np.einsum("s,ast,t->a", c, m, v) for c, m, v in zip(states, self.matrices, vectors, strict=True)]
        return abs(value), np.array(weak) / value


def _product(states: list[np.ndarray]) -> np.ndarray:
    product = np.ones(1, dtype=complex)
    for state in states:
        product = np.multiply.outer(product, state).reshape(-1)
    return product


def _environments(tensor: np.ndarray, states: list[np.ndarray]) -> list[np.ndarray]:
    """For every site the vector left when all other sites of a tensor are contracted."""
    vectors = []
    for i, state in enumerate(states):
        rest = tensor.reshape(len(state), -1)
        vectors.append(rest @ _product(states[i + 1 :]))
        tensor = state @ rest
    return vectors

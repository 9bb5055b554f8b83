"""Energies with known thermodynamic limits, from closed forms and Bethe ansatz; numpy and scipy only.

Energies are totals of H with spin operators (Pauli matrices for the Ising chain), each bond once.
"""

import numpy as np
import scipy.sparse as sparse
from scipy.integrate import quad
from scipy.sparse.linalg import eigsh


def ising_ring(sites, field):
    """-sum sz sz - h sum sx on a ring of an even number of sites (Pfeuty 1970: free fermions, even parity)."""
    k = (2 * np.arange(sites) + 1) * np.pi / sites
    return -np.sum(np.sqrt(1 + field**2 - 2 * field * np.cos(k)))


def ising_chain(sites, field):
    """The same on an open chain: minus the sum of the singular values of the hopping matrix (Lieb, Schultz, Mattis)."""
    return -np.linalg.svd(field * np.eye(sites) + np.eye(sites, k=1), compute_uv=False).sum()


def ising_limit(field):
    """Energy per site in the limit of many sites."""
    return -quad(lambda k: np.sqrt(1 + field**2 - 2 * field * np.cos(k)), 0, np.pi, epsabs=1e-13)[0] / np.pi


def xx_chain(sites):
    """Sx Sx + Sy Sy on an open chain: filled negative levels of free fermions."""
    levels = np.cos(np.pi * np.arange(1, sites + 1) / (sites + 1))
    return levels[levels < 0].sum()


def xxz_ring(sites, anisotropy=1.0):
    """Sx Sx + Sy Sy + D Sz Sz, S = 1/2, on an even ring, D > 0: Bethe ansatz (Bethe 1931, Yang and Yang 1966)."""
    number = sites // 2
    quantum = np.arange(number) - (number - 1) / 2
    phase, slope = _bethe_phases(anisotropy)
    x = 0.01 * quantum
    for _ in range(200):
        difference = x[:, None] - x
        residual = sites * phase(x, 1) - 2 * np.pi * quantum - phase(difference, 2).sum(axis=1)
        matrix = slope(difference, 2)
        diagonal = sites * slope(x, 1) - matrix.sum(axis=1) + np.diag(matrix)
        np.fill_diagonal(matrix, diagonal)
        step = np.linalg.solve(matrix, -residual)
        size = np.abs(step).max()
        x = x + step * min(1, 0.5 / max(size, 1e-300))
        if size < 1e-13:
            break
    return sites * anisotropy / 4 + np.sum(np.cos(np.pi - phase(x, 1)) - anisotropy)


def _bethe_phases(anisotropy):
    if anisotropy == 1:
        return lambda x, n: 2 * np.arctan(2 * x / n), lambda x, n: 4 / n / (1 + (2 * x / n) ** 2)
    if anisotropy < 1:
        gamma = np.arccos(anisotropy)

        def phase(x, n):
            return 2 * np.arctan(np.tanh(x) / np.tan(n * gamma / 2))

        def slope(x, n):
            c = 1 / np.tan(n * gamma / 2)
            return 2 * c / np.cosh(x) ** 2 / (1 + (c * np.tanh(x)) ** 2)
    else:
        eta = np.arccosh(anisotropy)

        def phase(x, n):
            return 2 * np.arctan(np.tan(x) / np.tanh(n * eta / 2)) + 2 * np.pi * np.floor(x / np.pi + 0.5)

        def slope(x, n):
            c = 1 / np.tanh(n * eta / 2)
            return 2 * c / np.cos(x) ** 2 / (1 + (c * np.tan(x)) ** 2)

    return phase, slope


def heisenberg(spin, pairs, sites):
    """Ground energy of sum S_i.S_j by diagonalization in the sector of smallest |S^z|; up to some 1e5 states."""
    levels = int(2 * spin + 1)
    m = spin - np.arange(levels)
    target = 0.5 * (round(2 * spin * sites) % 2)
    codes, total = np.zeros(1, dtype=np.int64), np.zeros(1)
    for site in range(sites):
        codes = (codes[:, None] * levels + np.arange(levels)).ravel()
        total = (total[:, None] + m).ravel()
        keep = np.abs(target - total) <= (sites - 1 - site) * spin + 1e-9
        codes, total = codes[keep], total[keep]
    digits = [(codes // levels ** (sites - 1 - i)) % levels for i in range(sites)]
    diagonal, parts = np.zeros(len(codes)), []
    for i, j in pairs:
        diagonal += m[digits[i]] * m[digits[j]]
        source = np.flatnonzero((digits[i] < levels - 1) & (digits[j] > 0))
        a, b = m[digits[i][source]], m[digits[j][source]]
        value = 0.5 * np.sqrt((spin * (spin + 1) - a * (a - 1)) * (spin * (spin + 1) - b * (b + 1)))
        reached = np.searchsorted(codes, codes[source] + levels ** (sites - 1 - i) - levels ** (sites - 1 - j))
        parts.append(sparse.csr_matrix((value, (source, reached)), shape=(len(codes),) * 2))
    half = sum(parts)
    matrix = half + half.T + sparse.diags(diagonal)
    if len(codes) < 400:
        return float(np.linalg.eigvalsh(matrix.toarray())[0])
    # a random start: a regular one may miss a symmetry class
    start = np.random.default_rng(4).normal(size=len(codes))
    return float(eigsh(matrix, k=1, which="SA", tol=1e-12, v0=start)[0][0])


def ring_pairs(sites):
    return [(i, (i + 1) % sites) for i in range(sites)]


def chain_pairs(sites):
    return [(i, i + 1) for i in range(sites - 1)]


def tilted_square(first, second):
    """(sites, pairs) of the square-lattice torus with translation vectors first and second."""
    span = np.array([first, second]).T
    inverse = np.linalg.inv(span)

    def home(point):
        fraction = inverse @ point
        return tuple(np.round(span @ (fraction - np.floor(fraction + 1e-9))).astype(int))

    sites = {}
    for point in np.ndindex(24, 24):
        sites.setdefault(home(np.array(point) - 12), len(sites))
    pairs = [(sites[s], sites[home(np.array(s) + step)]) for s in sites for step in ((1, 0), (0, 1))]
    return len(sites), pairs


def planar(angles):
    """Unit vectors in the plane."""
    return np.stack([np.cos(angles), np.sin(angles), 0 * np.asarray(angles)], axis=1)


def classical_ring(sites):
    """Classical minimum of sum n_i.n_j on a ring: (energy, unit vectors)."""
    turn = np.pi if sites % 2 == 0 else np.pi * (sites - 1) / sites
    return sites * np.cos(turn), planar(turn * np.arange(sites))


def first_coefficient(vectors, pairs, kappa):
    """e_1 of sum n_i.n_j at a minimum: half the symplectic frequencies plus kappa times the trace of the Hessian.

    kappa = -1/4 under wick, 0 weyl, 1/4 toeplitz. Zero modes cost this simple form accuracy: good to about 1e-8.
    """
    sites = len(vectors)
    frames = []
    for v in vectors:
        start = np.eye(3)[np.argmin(np.abs(v))]
        first = start - (start @ v) * v
        first /= np.linalg.norm(first)
        frames.append(np.stack([first, np.cross(v, first)]))
    hessian, multipliers = np.zeros((2 * sites, 2 * sites)), np.zeros(sites)
    for i, j in pairs:
        block = frames[i] @ frames[j].T
        hessian[2 * i : 2 * i + 2, 2 * j : 2 * j + 2] += block
        hessian[2 * j : 2 * j + 2, 2 * i : 2 * i + 2] += block.T
        multipliers[[i, j]] += vectors[i] @ vectors[j]
    hessian -= np.diag(np.repeat(multipliers, 2))
    values, columns = np.linalg.eigh(hessian)
    root = columns * np.sqrt(np.clip(values, 0, None)) @ columns.T
    turn = np.kron(np.eye(sites), [[0, 1], [-1, 0]])
    return 0.25 * np.linalg.svd(root @ turn @ root, compute_uv=False).sum() + kappa * np.trace(hessian)


PAIR_FACTOR = {"wick": lambda s: 1.0 + 0 * s, "weyl": lambda s: s / (s + 1), "toeplitz": lambda s: (s / (s + 1)) ** 2}
KAPPA = {"wick": -0.25, "weyl": 0.0, "toeplitz": 0.25}


def ring_records(sizes, spins, rules=("wick", "toeplitz"), energies=None, parameters=None):
    """Records of Heisenberg rings; energies {(sites, spin): energy with spin operators}, computed where not given."""
    records = []
    for sites in sizes:
        pairs = ring_pairs(sites)
        minimum, vectors = classical_ring(sites)
        angles = 2 * np.pi * np.arange(sites) / sites
        for spin in spins:
            energy = (energies or {}).get((sites, spin))
            if energy is None and energies is None:
                energy = heisenberg(spin, pairs, sites)
            for rule in rules:
                record = {
                    "sites": sites,
                    "spin": spin,
                    "rule": rule,
                    "parameters": dict(parameters or {}),
                    "classical_energy": minimum,
                    "classical_energy_bound": minimum - 1e-9,
                    "classical_certified": True,
                    "classical_mean": 0.0,
                    "classical_minima": 1,
                    "classical_converged": True,
                    "classical_configuration": vectors,
                    "positions": planar(angles) * sites / (2 * np.pi),
                    "pairs": np.array(pairs),
                    "extent": [sites],
                    "periodic": [True],
                    "status": "waiting",
                }
                factor = PAIR_FACTOR[rule](spin)
                coefficient = first_coefficient(vectors, pairs, KAPPA[rule])
                if energy is not None:
                    record |= {
                        "status": "converged",
                        "quantum_energy": energy / spin**2 * factor,
                        "quantum_energy_error": 1e-10,
                        "quantum_method": "exact",
                        "harmonic_coefficient": coefficient,
                        "harmonic_energy": minimum + coefficient / spin,
                        "upper_symbol_energy": minimum * factor * ((spin + 1) / spin) ** 2,
                        "coherent_energy": minimum * factor,
                        "product_energy": minimum * factor,
                        "seconds": 0.1,
                    }
                records.append(record)
    return records


ATTRS = {
    "title": "Rings of buoys",
    "energy_unit": "meV",
    "workflow": '[lattice]\nshape = "ring"\nsites = [4, 6, 8]\n\n[[term]]\npair = "nearest"\nexchange = 1.0\n',
    "versions": {"manybody": "0.1.0"},
    "term_keys": [[[1, 1], [1, 1]]],
}

"""Series of finite sizes whose limit of many sites is known: what the stated errors of limits are judged on.

Chains by closed forms, free fermions and Bethe ansatz; open chains of the matrix-product engine from
data/open_chain_energies.csv, computed by tests/benchmarks/limits.py; lattices of free modes in two and three
dimensions. Energies are totals. Windows of sizes were fixed before any result was looked at; held_cases was not used to
choose forms or constants of results/scaling_sites.py and site_forms.py, but for the form of open chains below their
correlation length, which was chosen on the spin-2 chain of both.
"""

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from reference import reference
from scipy.integrate import quad
from solvable import (
    _bethe_phases,
    chain_pairs,
    heisenberg,
    ising_chain,
    ising_limit,
    ising_ring,
    ring_pairs,
    xx_chain,
    xxz_ring,
)

TABLE = Path(__file__).parent.parent / "data" / "open_chain_energies.csv"
WINDOWS = (
    *((4, 6, 8), (6, 8, 10), (8, 12, 16), (4, 8, 16), (10, 20, 40), (20, 30, 40)),
    *((4, 6, 8, 10), (6, 10, 14, 18), (8, 12, 16, 20), (8, 16, 24, 32), (8, 16, 32, 64), (16, 24, 32, 48)),
    *((24, 32, 40, 48), (4, 6, 8, 10, 12), (8, 16, 24, 32, 40), (6, 12, 18, 24, 30), (12, 18, 24, 36, 48)),
    *((6, 8, 10, 12, 14, 16), (8, 10, 12, 14, 16, 18), (6, 8, 10, 12, 16, 20, 24), (12, 16, 20, 24, 32, 40)),
    *(tuple(range(6, 26, 2)), tuple(range(12, 42, 4)), tuple(range(6, 42, 2)), tuple(range(16, 50, 4))),
)
HELD_WINDOWS = (
    *((6, 10, 14), (12, 14, 18), (4, 8, 10, 12), (22, 26, 30, 34), (6, 12, 24, 36), (8, 14, 20, 26, 32)),
    *((14, 20, 28, 40), (12, 14, 16, 18, 20, 22), (6, 12, 18, 24, 36, 48), (16, 20, 24, 30, 36, 44)),
    *((18, 20, 22, 24, 26, 28, 30), (4, 6, 8, 10, 12, 14, 16, 18, 20)),
)


@dataclass(frozen=True)
class Case:
    """Total energies (n,) with their one-sided errors at the given numbers of sites, and the limit per site with the
    uncertainty to which it is known."""

    group: str
    model: str
    sites: tuple[int, ...]
    energy: np.ndarray
    error: np.ndarray
    truth: float
    uncertainty: float
    boundary: str
    dimension: int

    def families(self):
        """Even and odd sizes and the like, as the dataset would offer them: by extent, by sites for chains."""
        extent = np.round(np.array(self.sites) ** (1 / self.dimension)).astype(int)
        return {f"{q},{r}": extent % q == r for q in (2, 3, 4) for r in range(q)}


def xxz_limit(anisotropy):
    """Energy per site of the infinite XXZ chain (Yang, Yang 1966; des Cloizeaux, Gaudin 1966)."""
    if anisotropy == 1:
        return 0.25 - np.log(2)
    if anisotropy > 1:
        eta = np.arccosh(anisotropy)
        n = np.arange(1, int(40 / eta) + 2)
        return anisotropy / 4 - np.sinh(eta) * (0.5 + 2 * np.sum(1 / (np.exp(2 * n * eta) + 1)))
    gamma = np.arccos(anisotropy)

    def kernel(x):
        return np.sinh((np.pi - gamma) * x) / (np.sinh(np.pi * x) * np.cosh(gamma * x))

    return anisotropy / 4 - np.sin(gamma) * quad(kernel, 1e-12, 40, epsabs=1e-13, limit=400)[0]


def xxz_chain(sites, anisotropy=1.0):
    """Sx Sx + Sy Sy + D Sz Sz, S = 1/2, open, sites even, 0 < D <= 1: Bethe ansatz (Alcaraz et al. 1987, from memory;
    agrees with diagonalization)."""
    number = sites // 2
    quantum = np.arange(1, number + 1.0)
    phase, slope = _bethe_phases(anisotropy)
    x = 2 / np.pi * np.arctanh(np.tan(np.pi * (quantum - 0.4) / (2 * (sites + 1))))
    t = 0.0
    if anisotropy < 1:
        x *= np.arccos(anisotropy)
        t = np.tan(np.arccos(anisotropy) / 2)
    for _ in range(500):
        less, more = x[:, None] - x, x[:, None] + x
        other = ~np.eye(number, dtype=bool)
        residual = 2 * sites * phase(x, 1) - 2 * np.pi * quantum + 4 * np.arctan(t * np.tanh(x))
        residual -= ((phase(less, 2) + phase(more, 2)) * other).sum(axis=1)
        matrix = (slope(less, 2) - slope(more, 2)) * other
        ends = 4 * t / np.cosh(x) ** 2 / (1 + (t * np.tanh(x)) ** 2)
        diagonal = 2 * sites * slope(x, 1) + ends - ((slope(less, 2) + slope(more, 2)) * other).sum(axis=1)
        np.fill_diagonal(matrix, diagonal)
        step = np.linalg.solve(matrix, -residual)
        size = np.abs(step).max()
        x = np.abs(x + step * min(1, 0.3 / max(size, 1e-300)))
        if size < 1e-13:
            break
    return (sites - 1) * anisotropy / 4 + np.sum(np.cos(np.pi - phase(x, 1)) - anisotropy)


def xy_chain(sites, anisotropy, field):
    """-sum (1+g)/2 sx sx + (1-g)/2 sy sy + h sz, Pauli matrices, open (Lieb, Schultz, Mattis 1961)."""
    hopping = np.eye(sites, k=1) * (1 + anisotropy) / 2 + np.eye(sites, k=-1) * (1 - anisotropy) / 2
    return -np.linalg.svd(field * np.eye(sites) + hopping, compute_uv=False).sum()


def xy_limit(anisotropy, field):
    def level(k):
        return np.hypot(field + np.cos(k), anisotropy * np.sin(k))

    corner = [np.arccos(-field)] if field < 1 else None
    return -quad(level, 0, np.pi, epsabs=1e-13, limit=400, points=corner)[0] / np.pi


def dimer_chain(sites, strength):
    """(1 + d)(SxSx + SySy), then 1 - d and so on, open: free fermions. d < 0 leaves spins at the ends nearly free."""
    bonds = 0.5 * (1 + strength * (-1.0) ** np.arange(sites - 1))
    levels = np.linalg.eigvalsh(np.diag(bonds, 1) + np.diag(bonds, -1))
    return levels[levels < 0].sum()


def dimer_limit(strength):
    return -quad(lambda k: np.hypot(np.cos(k), strength * np.sin(k)), 0, np.pi / 2, epsabs=1e-13)[0] / np.pi


def computed(spin, anisotropy=1.0):
    """{sites: (energy, error)} of open chains from the table."""
    with TABLE.open(newline="", encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if float(row["spin"]) == spin]
    rows = [row for row in rows if float(row["anisotropy"]) == anisotropy]
    return {int(row["sites"]): (float(row["energy"]), float(row["error"])) for row in rows}


SPIN_LIMITS = {
    # (spin, anisotropy): limit, its uncertainty. S = 3/2: Hallberg, Wang, Horsch, Moreo 1996, from memory.
    (1.0, 1.0): (reference("B002").value, 0.0),
    (1.5, 1.0): (-2.82833, 1e-5),
    (2.0, 1.0): (reference("B005").value, 1e-6),
    (0.5, 1.5): (xxz_limit(1.5), 0.0),
    (0.5, 2.0): (reference("B010").value, 0.0),
}


def engine_cases(windows, chosen=tuple(SPIN_LIMITS)):
    for spin, anisotropy in chosen:
        table = computed(spin, anisotropy)
        truth, uncertainty = SPIN_LIMITS[spin, anisotropy]
        for window in windows:
            if set(window) <= set(table):
                energy, error = np.array([table[n] for n in window]).T
                group = f"spin {spin:g} open" if anisotropy == 1 else "gapped xxz open"
                yield Case(group, f"{spin}, {anisotropy}", window, energy, error, truth, uncertainty, "open", 1)


def _chain_cases(models, windows):
    for group, value, solve, truth, boundary in models:
        known = {n: solve(n, *value) for window in windows for n in window}
        for window in windows:
            energy = np.array([known[n] for n in window])
            yield Case(group, str(value), window, energy, np.zeros(len(window)), truth, 0.0, boundary, 1)


def _chain_models(open_xxz, rings, fields, dimers, fermions):
    models = [("xxz open", (d,), xxz_chain, xxz_limit(d), "open") for d in open_xxz]
    models += [("xxz ring", (d,), xxz_ring, xxz_limit(d), "periodic") for d in rings]
    models += [("ising ring", (h,), ising_ring, ising_limit(h), "periodic") for h in fields]
    models += [("ising open", (h,), ising_chain, ising_limit(h), "open") for h in fields]
    models += [("dimer open", (d,), dimer_chain, dimer_limit(d), "open") for d in dimers]
    return models + [("xy open", pair, xy_chain, xy_limit(*pair), "open") for pair in fermions]


def chain_cases(windows=WINDOWS):
    """The calibration set of chains."""
    models = _chain_models(
        (1e-4, 0.3, 0.5, 0.8, 0.95, 1.0),
        (0.3, 0.5, 0.8, 0.95, 1.0, 1.05, 1.2, 1.5, 2.0, 3.0),
        (0.3, 0.5, 0.8, 0.95, 1.0, 1.05, 1.5),
        (-0.4, -0.1, -0.03, 0.03, 0.1, 0.4),
        ((0.5, 0.3), (0.2, 1.0), (0.5, 0.9), (0.3, 1.2)),
    )
    return [*_chain_cases(models, windows), *engine_cases(windows)]


def held_cases(windows=HELD_WINDOWS):
    """Other models and other windows, with more of them close to a critical point."""
    models = _chain_models(
        (0.2, 0.6, 0.85, 0.97),
        (0.2, 0.6, 0.85, 0.97, 1.08, 1.3, 1.7),
        (0.7, 0.93, 0.97, 1.03, 1.1),
        (-0.25, -0.05, 0.05, 0.25),
        ((0.6, 0.4), (0.3, 1.1), (0.4, 0.97)),
    )
    return [*_chain_cases(models, windows), *engine_cases(windows)]


MIXED_WINDOWS = (
    *((3, 4, 5), (3, 5, 6), (4, 5, 6), (5, 6, 8), (2, 3, 4, 5), (3, 4, 5, 6), (4, 5, 6, 7), (4, 6, 7, 8)),
    *((4, 6, 8, 9), (3, 4, 5, 6, 7), tuple(range(3, 9)), tuple(range(3, 11))),
)


def mixed_cases(windows=MIXED_WINDOWS):
    """Few even and odd sizes together: rings of half-integer spin and fermions on open chains alternate, others not."""
    models = [
        ("xx, mixed", (), xx_chain, reference("B006").value, "open"),
        ("ising, mixed", (1.0,), ising_chain, ising_limit(1.0), "open"),
    ]
    for spin, most, truth in ((0.5, 10, xxz_limit(1.0)), (1.0, 8, SPIN_LIMITS[1.0, 1.0][0])):
        small = [window for window in windows if min(window) > 2 and max(window) <= most]
        bonds = (("ring", ring_pairs, "periodic"), ("open", chain_pairs, "open"))
        for name, pairs, boundary in bonds:
            solve = lambda n, spin=spin, pairs=pairs: heisenberg(spin, pairs(n), n)  # noqa: E731
            yield from _chain_cases([(f"spin {spin:g} {name}, mixed", (), solve, truth, boundary)], small)
    yield from _chain_cases(models, windows)


def _momenta(extent, shift=0.0):
    return (2 * np.pi * np.arange(extent) + shift) / extent


def _waves(k):
    return np.pi * np.arange(1, k + 1) / (k + 1)


def square_waves(extent, anisotropy=1.0):
    """Zero-point energy of spin waves on the square torus."""
    mean = np.add.outer(np.cos(_momenta(extent)), np.cos(_momenta(extent))) / 2
    return np.sqrt(np.maximum(anisotropy**2 - mean**2, 0)).sum() - anisotropy * extent**2


def flux_torus(extent):
    """Fermions with half a flux quantum per square plaquette: four Dirac points."""
    cosine = np.cos(_momenta(extent, np.pi))
    return -np.hypot.outer(cosine, cosine).sum()


def flux_open(extent):
    return -np.hypot.outer(np.cos(_waves(extent)), np.cos(_waves(extent))).sum()


def honeycomb_torus(extent):
    phase = np.exp(1j * _momenta(extent, np.pi))
    return -np.abs(1 + np.add.outer(phase, phase)).sum()


def springs(extent, mass=0.0, dimension=2):
    """Zero-point energy of coupled oscillators with clamped edges."""
    part = 2 - 2 * np.cos(_waves(extent))
    total = part
    for _ in range(dimension - 1):
        total = np.add.outer(total, part)
    return np.sqrt(mass**2 + total).sum()


def cubic_waves(extent):
    cosine = np.cos(_momenta(extent))
    mean = np.add.outer(np.add.outer(cosine, cosine), cosine) / 3
    return np.sqrt(np.maximum(1 - mean**2, 0)).sum()


def _limit(solve, dimension, extents, powers):
    """From large lattices, all leading powers of the extent removed."""
    values = [solve(n) / n**dimension for n in extents]
    columns = np.array(extents, float)[:, None] ** -np.array([0.0, *powers])
    return np.linalg.solve(columns, values)[0]


def lattice_cases():
    """The calibration set in two and three dimensions, by extents."""
    even = ((2, 4, 6), (4, 6, 8), (4, 8, 12), (2, 6, 10), (2, 4, 6, 8), (4, 6, 8, 10), (6, 8, 10, 12))
    even += ((4, 6, 8, 10, 12), (2, 4, 6, 8, 10), (6, 8, 10, 12, 14, 16))
    odd = ((3, 5, 7), (3, 5, 7, 9), (5, 7, 9, 11))
    every = ((2, 3, 4), (3, 4, 5), (4, 6, 8), (2, 4, 6), (2, 3, 4, 5), (3, 4, 5, 6), (4, 6, 8, 10), (2, 3, 4, 5, 6))
    every += ((4, 5, 6, 7, 8), (4, 6, 8, 10, 12), (4, 5, 6, 7, 8, 9, 10), (6, 8, 10, 12))
    thirds = ((3, 6, 9), (4, 7, 10), (2, 5, 8), (3, 6, 9, 12), (4, 7, 10, 13))
    far, odd_powers, powers = (200, 240, 280, 320, 360, 400), (3, 5, 7, 9, 11), (1, 2, 3, 4, 5)
    flux = _limit(flux_torus, 2, far, odd_powers)
    families = [
        ("2d torus", "waves", square_waves, 2, "periodic", _limit(square_waves, 2, far, odd_powers), even + odd),
        ("2d torus", "flux", flux_torus, 2, "periodic", flux, even),
        # B021 holds a quarter of this per pair of sites, in other units
        ("2d torus", "honeycomb", honeycomb_torus, 2, "periodic", 8 * reference("B021").value, thirds),
        ("2d open", "springs", springs, 2, "open", _limit(springs, 2, far, powers), every),
        ("2d open", "flux", flux_open, 2, "open", flux, even),
        (
            "3d torus",
            "waves",
            cubic_waves,
            3,
            "periodic",
            _limit(cubic_waves, 3, (60, 70, 80, 90), (4, 6, 8)),
            even[:5],
        ),
        (
            *("3d open", "springs", lambda n: springs(n, dimension=3), 3, "open"),
            *(_limit(lambda n: springs(n, dimension=3), 3, (60, 70, 80, 90, 100, 110), powers), every[:6]),
        ),
    ]
    for gap in (1.02, 1.1, 1.5):
        solve = lambda n, gap=gap: square_waves(n, gap)  # noqa: E731
        families.append(("2d torus", f"waves {gap}", solve, 2, "periodic", square_waves(600, gap) / 600**2, even + odd))
    for mass in (0.2, 0.5, 1.0):
        solve = lambda n, mass=mass: springs(n, mass)  # noqa: E731
        part = 2 - 2 * np.cos(_momenta(1000))
        truth = np.sqrt(mass**2 + np.add.outer(part, part)).mean()
        families.append(("2d open", f"springs {mass}", solve, 2, "open", truth, every))
    cases = []
    for group, model, solve, dimension, boundary, truth, windows in families:
        for window in windows:
            sites = tuple(n**dimension for n in window)
            energy = np.array([solve(n) for n in window])
            cases.append(Case(group, model, sites, energy, np.zeros(len(sites)), truth, 0.0, boundary, dimension))
    return cases

"""Graphs and operators of the reference rows, and dense operators built with numpy alone, for the tests of quantum/."""

import itertools
import re
from fractions import Fraction

import numpy as np

from manybody.model import couplings
from manybody.model.quantization import SpinOperator, quantize


def ring(n, distance=1):
    return [(i, (i + distance) % n) for i in range(n)]


def chain(n, distance=1):
    return [(i, i + distance) for i in range(n - distance)]


def complete(n):
    return list(itertools.combinations(range(n), 2))


def parts(*sizes):
    """Complete multipartite graph."""
    owner = np.repeat(np.arange(len(sizes)), sizes)
    return [(i, j) for i, j in complete(len(owner)) if owner[i] != owner[j]]


def torus(lx, ly, steps):
    """Square array of sites x * ly + y with periodic bonds along the given steps."""
    return [(x * ly + y, (x + a) % lx * ly + (y + b) % ly) for x in range(lx) for y in range(ly) for a, b in steps]


def tilted_torus(first, second):
    """Nearest-neighbour bonds of the square lattice with sites identified along two vectors."""
    lattice = np.array([first, second])
    size = round(abs(np.linalg.det(lattice)))

    def reduced(point):
        fraction = np.linalg.solve(lattice.T.astype(float), np.array(point, dtype=float))
        inside = np.array(point) - np.floor(fraction + 1e-9).astype(int) @ lattice
        return tuple(int(v) for v in inside)

    sites = {}
    for point in itertools.product(range(size), repeat=2):
        sites.setdefault(reduced(point), len(sites))
    assert len(sites) == size
    return [(i, sites[reduced((x + a, y + b))]) for (x, y), i in sites.items() for a, b in ((1, 0), (0, 1))]


def ladder(rungs, periodic):
    legs = ring(rungs) if periodic else chain(rungs)
    return [(2 * i + s, 2 * j + s) for i, j in legs for s in (0, 1)] + [(2 * i, 2 * i + 1) for i in range(rungs)]


def honeycomb(lx, ly):
    def site(x, y, s):
        return 2 * (x % lx * ly + y % ly) + s

    cells = list(itertools.product(range(lx), range(ly)))
    return [(site(x, y, 0), site(x - a, y - b, 1)) for x, y in cells for a, b in ((0, 0), (1, 0), (0, 1))]


def kagome(lx, ly):
    def site(x, y, s):
        return 3 * (x % lx * ly + y % ly) + s

    bonds = []
    for x, y in itertools.product(range(lx), range(ly)):
        a, b, c = (site(x, y, s) for s in range(3))
        bonds += [(a, b), (b, c), (a, c), (b, site(x + 1, y, 0)), (c, site(x, y + 1, 0)), (b, site(x + 1, y - 1, 2))]
    return bonds


def pyrochlore(l):
    """Corner-sharing tetrahedra: four sites of a cell, and the site each of them meets in the next cells."""
    offsets = [(0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)]

    def site(cell, s):
        x, y, z = (v % l for v in cell)
        return 4 * ((x * l + y) * l + z) + s

    bonds = []
    for cell in itertools.product(range(l), repeat=3):
        for s, t in itertools.combinations(range(4), 2):
            bonds.append((site(cell, s), site(cell, t)))
            # The down tetrahedron of a cell takes each sublattice from the cell one step back along its own direction.
            back_s = tuple(v - o for v, o in zip(cell, offsets[s], strict=True))
            back_t = tuple(v - o for v, o in zip(cell, offsets[t], strict=True))
            bonds.append((site(back_s, s), site(back_t, t)))
    return bonds


def cubic(l):
    def site(x, y, z):
        return (x % l * l + y % l) * l + z % l

    cells = list(itertools.product(range(l), repeat=3))
    return [(site(*p), site(*(a + b for a, b in zip(p, d, strict=True)))) for p in cells for d in np.eye(3, dtype=int)]


def by_distance(points):
    """Pairs of points at the smallest distance."""
    points = np.array(points, dtype=float)
    distance = np.linalg.norm(points[:, None] - points[None], axis=2)
    shortest = distance[distance > 0].min()
    return [(i, j) for i, j in complete(len(points)) if distance[i, j] < shortest * (1 + 1e-9)]


def polyhedron(name):
    golden = (1 + 5**0.5) / 2
    if name == "cube":
        return by_distance(list(itertools.product((-1, 1), repeat=3)))
    if name == "icosahedron":
        flat = [(0, a, b * golden) for a in (-1, 1) for b in (-1, 1)]
        return by_distance([np.roll(p, k) for p in flat for k in range(3)])
    if name == "truncated tetrahedron":
        flat = [p for p in itertools.product((-1, 1), (-1, 1), (-3, 3)) if np.prod(p) > 0]
        return by_distance([np.roll(p, k) for p in flat for k in range(3)])
    if name == "Petersen":
        return (
            [(i, (i + 1) % 5) for i in range(5)]
            + [(i, i + 5) for i in range(5)]
            + [(5 + i, 5 + (i + 2) % 5) for i in range(5)]
        )
    raise KeyError(name)


def heisenberg(sites, pairs, spin, strength=1.0) -> SpinOperator:
    """sum J S_i.S_j in spin operators; J a number or one per pair."""
    spins = np.broadcast_to(spin, (sites,))
    pairs = np.array(pairs)
    scale = strength * spins[pairs[:, 0]] * spins[pairs[:, 1]]
    return quantize(couplings.exchange(sites, pairs, np.broadcast_to(scale, (len(pairs),))[:, None, None]), spin)


def polynomial_of_pair(sites, pairs, spin, linear, square) -> SpinOperator:
    """sum a x + b x^2 with x = S_i.S_j and x^2 the operator square, which is the symmetrized one minus x / 2."""
    f = couplings.exchange(sites, pairs, (linear - square / 2) * spin**2)
    return quantize(f + couplings.biquadratic(sites, pairs, square * spin**4), spin)


def reference_operator(row) -> SpinOperator:
    """The operator of a row of the A section, in the row's own units. Raises KeyError for a model not known here."""
    model, n, s = row.model, row.sites, row.spin
    number = {key: float(value) for key, value in re.findall(r"\b(J1|J2|D|E|h)=(-?[\d.]+\d|-?\d+)", model)}
    periodic = row.boundary == "periodic"
    bonds = ring(n) if periodic else chain(n)
    if model.startswith("dimer"):
        return heisenberg(2, [(0, 1)], s)
    if "H = sum over bonds S_i.S_j, ring" in model or re.match(r"H = sum over bonds S_i.S_j, open", model):
        return heisenberg(n, bonds, s)
    if model.startswith(("complete graph", "tetrahedron")):
        return heisenberg(n, complete(n), s)
    if model.startswith(("complete bipartite", "complete tripartite")):
        return heisenberg(n, parts(*map(int, re.search(r"K_\{([\d,]+)\}", model)[1].split(","))), s)
    if model.startswith("star with"):
        return heisenberg(n, parts(1, n - 1), s)
    for name in ("cube", "icosahedron", "Petersen", "truncated tetrahedron"):
        if model.startswith(name):
            return heisenberg(n, polyhedron(name), s)
    if model.startswith(("Majumdar", "J1-J2 ring")):
        second = 0.5 if model.startswith("Majumdar") else number["J2"]
        return heisenberg(n, ring(n) + ring(n, 2), s, np.repeat([1.0, second], n))
    if model.startswith("open chain J1=1, J2=1/2"):
        return heisenberg(n, chain(n) + chain(n, 2), s, np.repeat([1.0, 0.5], [n - 1, n - 2]))
    if model.startswith("sawtooth"):
        return heisenberg(n, ring(n) + [(i, (i + 2) % n) for i in range(0, n, 2)], s)
    if model.startswith("AKLT"):
        return polynomial_of_pair(n, bonds, s, 1.0, 1 / 3)
    if "x=S_i.S_j" in model:
        angle = re.search(r"t=(-?[\d.]+)pi", model)
        if angle:
            t = float(angle[1]) * np.pi
            return polynomial_of_pair(n, bonds, s, np.cos(t), np.sin(t))
        linear, square = {"(x-x^2)": (1, -1), "(x+x^2)": (1, 1), "-sum x^2": (0, -1)}[
            re.search(r"\(x[-+]x\^2\)|-sum x\^2", model)[0]
        ]
        return polynomial_of_pair(n, bonds, s, linear, square)
    if model.startswith("transverse-field Ising"):
        # Pauli matrices are S / S of spin 1/2.
        f = couplings.exchange(n, bonds, [0, 0, -1.0]) + couplings.field(n, range(n), [number["h"], 0, 0])
        return quantize(f, s)
    if model.startswith("XX open"):
        return quantize(couplings.exchange(n, bonds, [s**2, s**2, 0.0]), s)
    if "SxSx+SySy+D SzSz" in model:
        return quantize(couplings.exchange(n, bonds, s**2 * np.array([1, 1, number["D"]])), s)
    if model.startswith("odd XXZ"):
        return quantize(couplings.exchange(n, bonds, s**2 * np.array([-1, -1, 0.5])), s)
    if model.startswith("Haldane-Shastry"):
        strengths = [(np.pi / n) ** 2 / np.sin(np.pi * (i - j) / n) ** 2 for i, j in complete(n)]
        return heisenberg(n, complete(n), s, np.array(strengths))
    if model.startswith("square lattice 4x4"):
        near, far = torus(4, 4, [(1, 0), (0, 1)]), torus(4, 4, [(1, 1), (1, -1)])
        return heisenberg(n, near + far, s, np.repeat([1.0, number["J2"]], [len(near), len(far)]))
    if model.startswith("square lattice torus"):
        vectors = [tuple(map(int, v)) for v in re.findall(r"\((-?\d+),(-?\d+)\)", model)]
        return heisenberg(n, tilted_torus(*vectors[:2]), s)
    if model.startswith("triangular lattice torus 3x3"):
        return heisenberg(n, torus(3, 3, [(1, 0), (0, 1), (1, -1)]), s)
    if model.startswith("honeycomb torus 3x3"):
        return heisenberg(n, honeycomb(3, 3), s)
    if model.startswith("Shastry-Sutherland 4x4"):
        square = torus(4, 4, [(1, 0), (0, 1)])
        dimers = [(4 * x + y, (x + 1) % 4 * 4 + (y + (1 if x % 2 == 0 else -1)) % 4) for x in range(4) for y in (0, 2)]
        return heisenberg(n, square + dimers, s, np.repeat([0.5, 1.0], [len(square), len(dimers)]))
    if model.startswith("two-leg ladder"):
        return heisenberg(n, ladder(n // 2, "periodic" in model), s)
    if model.startswith("Heisenberg ring + D"):
        f = couplings.exchange(n, bonds, s**2)
        return quantize(f + couplings.anisotropy(n, range(n), [0, 0, 1], number["D"] * s**2), s)
    if model.startswith("single site"):
        f = couplings.anisotropy(1, [0], [0, 0, 1], number["D"] * s**2)
        f = f + couplings.anisotropy(1, [0], [1, 0, 0], number["E"] * s**2)
        return quantize(f - couplings.anisotropy(1, [0], [0, 1, 0], number["E"] * s**2), s)
    raise KeyError(model)


def dense_spin(spin):
    """(3, d, d): S_x, S_y, S_z from the textbook matrix elements, m = S first."""
    d = round(2 * Fraction(spin)) + 1
    m = float(spin) - np.arange(d)
    raising = np.diag(np.sqrt(spin * (spin + 1) - m[1:] * (m[1:] + 1)), 1)
    return np.array([(raising + raising.T) / 2, (raising - raising.T) / 2j, np.diag(m)])


def dense_site(matrix, site, dims):
    """A one-site matrix on the whole space, numpy.kron order."""
    total = np.eye(1)
    for k, d in enumerate(dims):
        total = np.kron(total, matrix if k == site else np.eye(d))
    return total

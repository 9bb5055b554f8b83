"""Classical minima against the rows D of data/reference_values.csv, exact formulas, and in trouble."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import reference, table
from scipy.optimize import brentq
from scipy.spatial.transform import Rotation

from manybody.classical.clusters import cluster_sum
from manybody.classical.minimize import MinimizeSettings, minimize
from manybody.classical.search import find_ground_state
from manybody.classical.sphere_product import random_points
from manybody.model import lattice as lattices
from manybody.model.couplings import anisotropy, antisymmetric, biquadratic, exchange, field
from manybody.model.energy import EnergyFunction
from manybody.model.quantization import quantize


def heisenberg(lattice, coupling=1.0, shell="nearest"):
    return exchange(lattice.sites, lattice.pairs(shell), coupling)


def two_shells(lattice, second):
    return heisenberg(lattice) + heisenberg(lattice, second, "second")


def graph(sites, pairs):
    return exchange(sites, np.array(pairs), 1.0)


def polyhedron(vertices):
    """Nearest-neighbour exchange on a polyhedron given by its vertices."""
    distance = np.linalg.norm(vertices[:, None] - vertices[None], axis=-1) + 10 * np.eye(len(vertices))
    pairs = np.argwhere(np.triu(distance < distance.min() * 1.001))
    return graph(len(vertices), pairs)


def icosahedron():
    golden = (1 + math.sqrt(5)) / 2
    corners = [(0, a, b * golden) for a in (-1, 1) for b in (-1, 1)]
    return np.array([np.roll(corner, k) for corner in corners for k in range(3)], dtype=float)


def truncated_tetrahedron():
    signs = [(1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1)]
    return np.array([np.roll((3, 1, 1), k) * sign for sign in signs for k in range(3)], dtype=float)


def ring_with(h=0.0, d=0.0, xxz=1.0, sites=8):
    ring = lattices.ring(sites)
    f = heisenberg(ring, [1.0, 1.0, xxz])
    return f + field(sites, range(sites), [0, 0, h]) + anisotropy(sites, range(sites), [0, 0, 1], d)


def twisted(lattice, d=0.7):
    pairs = lattice.pairs("nearest")
    return heisenberg(lattice) + antisymmetric(lattice.sites, pairs, [0, 0, d])


def bond_directional(cells=3):
    lattice = lattices.honeycomb([cells, cells], periodic=True)
    return sum(
        (exchange(lattice.sites, lattice.pairs(name), np.eye(3)[k]) for k, name in enumerate("abc")),
        start=EnergyFunction(lattice.sites),
    )


def bilinear_biquadratic(t, sites=6):
    chain = lattices.chain(sites)
    pairs = chain.pairs("nearest")
    return exchange(sites, pairs, math.cos(t * math.pi)) + biquadratic(sites, pairs, math.sin(t * math.pi))


def transverse(h):
    ring = lattices.ring(8)
    return heisenberg(ring, [0, 0, -1.0]) + field(8, range(8), [h, 0, 0])


def torus(shape, *extent):
    return getattr(lattices, shape)(list(extent), periodic=True)


# id -> (energy function, what the row counts: 1 the total, or the number of sites or bonds)
CASES = {
    "D001": (lambda: two_shells(lattices.ring(12), 0.1), 12),
    "D002": (lambda: two_shells(lattices.ring(12), 0.25), 12),
    "D005": (lambda: two_shells(lattices.ring(12), 0.5), 12),
    "D009": (lambda: two_shells(lattices.ring(12), 0.5), 1),
    "D011": (lambda: two_shells(lattices.ring(10), 0.3), 1),
    **{
        key: (lambda n=n: heisenberg(lattices.ring(n)), 1)
        for key, n in [("D012", 3), ("D013", 5), ("D015", 9), ("D016", 11), ("D018", 21), ("D019", 4), ("D020", 10)]
    },
    "D021": (lambda: heisenberg(lattices.chain(4)), 1),
    **{
        key: (lambda n=n: heisenberg(lattices.complete(n)), 1)
        for key, n in [("D023", 3), ("D024", 4), ("D026", 6), ("D028", 10)]
    },
    **{
        key: (lambda e=e: heisenberg(lattices.bipartite(e)), 1)
        for key, e in [("D029", [4, 1]), ("D030", [3, 2]), ("D032", [10, 10])]
    },
    "D033": (lambda: polyhedron(np.concatenate([np.eye(3), -np.eye(3)])), 1),
    "D034": (lambda: polyhedron(np.array(np.meshgrid(*[[0.0, 1.0]] * 3)).reshape(3, -1).T), 1),
    "D036": (lambda: polyhedron(icosahedron()), 1),
    "D038": (lambda: polyhedron(truncated_tetrahedron()), 1),
    "D040": (lambda: heisenberg(torus("triangular", 6, 6)), 36),
    "D041": (lambda: heisenberg(torus("kagome", 3, 3)), 27),
    "D043": (lambda: heisenberg(torus("honeycomb", 3, 3)), 18),
    "D044": (lambda: heisenberg(torus("square", 4, 4)), 16),
    "D045": (lambda: two_shells(torus("square", 6, 6), 0.25), 36),
    "D046": (lambda: two_shells(torus("square", 6, 6), 0.5), 36),
    "D048": (lambda: two_shells(torus("square", 6, 6), 1.0), 36),
    "D049": (lambda: two_shells(torus("triangular", 6, 6), 0.1), 36),
    "D050": (lambda: two_shells(torus("triangular", 6, 6), 0.125), 36),
    "D052": (lambda: twisted(lattices.chain(2)), 1),
    "D053": (lambda: twisted(lattices.chain(5)), 1),
    "D055": (lambda: twisted(lattices.ring(6)), 1),
    "D057": (lambda: twisted(lattices.ring(8)), 1),
    "D058": (bond_directional, 18),
    "D060": (lambda: ring_with(h=1.0), 8),
    "D062": (lambda: ring_with(h=4.0), 8),
    "D063": (lambda: ring_with(h=5.0), 8),
    "D064": (lambda: ring_with(h=1.0, d=-0.5), 8),
    "D065": (lambda: ring_with(h=2.0, d=-0.5), 8),
    "D068": (lambda: ring_with(h=4.0, d=-0.5), 8),
    "D069": (lambda: ring_with(d=0.5), 8),
    "D071": (lambda: ring_with(h=1.0, xxz=0.5), 8),
    "D073": (lambda: ring_with(h=3.0, xxz=2.0), 8),
    "D075": (lambda: ring_with(h=7.0, xxz=2.0), 8),
    **{
        key: (lambda t=t: bilinear_biquadratic(t), 5)
        for key, t in zip(
            ["D076", "D078", "D079", "D080", "D081", "D082", "D083", "D085", "D086", "D087"],
            [0.0, 0.2, 0.25, 0.4, 0.5, -0.1, -0.25, 0.6, 0.75, 0.9],
        )
    },
    "D089": (lambda: transverse(0.5), 1),
    "D091": (lambda: transverse(2.0), 1),
    "D092": (lambda: field(1, [0], [0, 0, 1]) + anisotropy(1, [0], [1, 0, 0], -0.6), 1),
}
INCOMMENSURATE = {"D003": 0.3, "D007": 1.0}


def test_every_row_is_covered():
    assert {key for key in table() if key.startswith("D")} == set(CASES) | set(INCOMMENSURATE)


@pytest.mark.parametrize("key", CASES)
def test_reference_minima(key):
    build, count = CASES[key]
    f = build()
    found = find_ground_state(f, starts=64)
    assert found.result.converged
    assert found.result.gradient_norm <= 1e-10
    row = reference(key)
    assert found.result.energy / count == pytest.approx(row.value, abs=2e-12, rel=1e-12)
    # all of these can be proven; the proof must not exceed the published value either
    assert found.certificate.certified
    assert found.certificate.bound / count <= row.value + 1e-9


@pytest.mark.parametrize("key", INCOMMENSURATE)
def test_incommensurate_spiral(key):
    """The infinite chain lies between the cluster bound, exact for these triangles, and every ring; long rings come
    close.
    """
    second, row = INCOMMENSURATE[key], reference(key)
    bound = cluster_sum(two_shells(lattices.ring(12), second))
    assert bound.rigorous
    assert bound.kind == "triangles"
    assert bound.bound / 12 == pytest.approx(row.value, abs=1e-8)
    pitch = math.acos(-1 / (4 * second)) / (2 * math.pi)
    sites = min(range(60, 121), key=lambda n: abs(n * pitch - round(n * pitch)) / n)
    energy = minimize(two_shells(lattices.ring(sites), second), MinimizeSettings(starts=16)).energy / sites
    # in the frame that turns with the spiral every ring fits its pitch, and all digits of the row are reached
    turned = EnergyFunction(12)
    for strength, step in ((1.0, 1), (second, 2)):
        c, s = math.cos(2 * math.pi * step * pitch), math.sin(2 * math.pi * step * pitch)
        turn = strength * np.array([[c, -s, 0], [s, c, 0], [0, 0, 1.0]])
        turned = turned + exchange(12, [[k, (k + step) % 12] for k in range(12)], turn)
    exact = find_ground_state(turned)
    assert exact.result.energy / 12 == pytest.approx(row.value, abs=2e-12)
    assert exact.certificate.certified
    # a wave number of the ring next to the pitch, and the curvature of the energy there
    mismatch = 2 * math.pi * abs(pitch - round(sites * pitch) / sites)
    assert row.value - 1e-12 <= energy <= row.value + 2 * second * mismatch**2 + 1e-12


def test_rerun_is_identical_and_other_seeds_agree():
    f = two_shells(torus("triangular", 5, 5), 0.3)
    one, again = minimize(f), minimize(f)
    assert one.energy == again.energy
    assert np.array_equal(one.configuration, again.configuration)
    assert [m.count for m in one.minima] == [m.count for m in again.minima]
    assert minimize(f, MinimizeSettings(seed=7, starts=32)).energy == pytest.approx(one.energy, rel=1e-12)


def test_distinct_minima_and_how_often():
    """f = -n_z - 0.6 n_x^2 has two minima, mirror images in x (row D092), and no symmetry axis."""
    f = field(1, [0], [0, 0, 1]) + anisotropy(1, [0], [1, 0, 0], -0.6)
    found = minimize(f)
    lowest = [m for m in found.minima if m.energy < found.energy + 1e-9]
    assert len(lowest) == 2
    assert sum(m.count for m in lowest) >= 60
    x = sorted(m.configuration[0, 0] for m in lowest)
    assert np.allclose(x, [-math.sqrt(11) / 6, math.sqrt(11) / 6], atol=1e-9)  # cos = 5/6


def test_common_rotations_are_one_minimum():
    ring = minimize(two_shells(lattices.ring(12), 0.25))
    assert len(ring.minima) == 1
    assert ring.minima[0].count == ring.starts_used == 64
    # left and right spirals about z are different functions of a fixed axis, one is lower
    assert len([m for m in minimize(twisted(lattices.ring(8))).minima if m.energy < -9.6166]) == 1


def test_quadratic_and_general_descent_agree():
    """A biquadratic term of strength zero would be dropped; a tiny one sends the same problem through
    the other path.
    """
    f = two_shells(torus("triangular", 4, 4), 0.2) + field(16, range(16), [0.3, 0, 0.1])
    other = minimize(f + biquadratic(16, torus("triangular", 4, 4).pairs("nearest"), 1e-13))
    assert other.energy == pytest.approx(minimize(f).energy, rel=1e-12)


def test_proof_and_report_steer_the_search():
    f = two_shells(torus("triangular", 5, 5), 0.3)
    seen, told = [], []

    def proof(configuration):
        seen.append(configuration)
        return random_points(np.random.default_rng(0), 25, (3,)) if len(seen) == 1 else len(seen) > 2

    found = minimize(f, proof=proof, report=told.append)
    assert found.proven
    assert found.starts_used == 1 + 3 + 6
    assert [entry["starts"] for entry in told] == [1, 10]


def test_extra_starts_are_used_and_checked():
    f = heisenberg(lattices.ring(5))
    assert minimize(f, MinimizeSettings(starts=1), random_points(np.random.default_rng(0), 5, (4,))).starts_used == 5
    with pytest.raises(ValueError, match="extra_starts must have shape"):
        minimize(f, extra_starts=np.ones((5, 3)))
    with pytest.raises(ValueError, match="starts must be a positive integer"):
        MinimizeSettings(starts=0)


@pytest.mark.parametrize("size", [5e-324, 1e-300, 1e-12, 1e12, 1e300])
def test_couplings_of_any_size(size):
    f = size * (heisenberg(lattices.ring(5)) + field(5, [0, 1], [[0, 0, 1], [0, 0, -1]]))
    reference_result = minimize(heisenberg(lattices.ring(5)) + field(5, [0, 1], [[0, 0, 1], [0, 0, -1]]))
    found = find_ground_state(f)
    assert found.result.converged
    assert math.isfinite(found.result.energy)
    assert math.isfinite(found.certificate.bound)
    if size > 1e-310:
        assert found.result.energy / size == pytest.approx(reference_result.energy, rel=1e-12)


def test_constant_functions_and_uncoupled_sites():
    constant = find_ground_state(EnergyFunction(4, 2.5))
    assert (constant.result.energy, constant.certificate.bound, constant.result.starts_used) == (2.5, 2.5, 0)
    assert constant.certificate.certified
    assert constant.certificate.method == "constant"
    f = exchange(6, [[1, 3], [3, 4]], 1.0) - 3.0
    found = find_ground_state(f)
    assert found.result.energy == pytest.approx(-5.0, abs=1e-14)
    assert found.certificate.certified
    assert len(found.result.minima) == 1
    assert np.array_equal(found.result.configuration[[0, 2, 5]], np.tile([0.0, 0.0, 1.0], (3, 1)))


def test_couplings_that_vanish_beside_a_constant():
    """The lower symbol of an anisotropy at S = 1/2 is a constant, here 10^600 times the exchange."""
    f = exchange(3, [[0, 1]], 1e-300) + anisotropy(3, [0], [0, 0, 1], 1e300)
    found = find_ground_state(quantize(f, 0.5, "toeplitz").lower_symbol())
    assert found.result.energy == pytest.approx(1e300 / 3, rel=1e-12)
    assert found.certificate.certified


def test_contradictory_fields():
    f = field(2, [0, 0], [[0, 0, 1], [0, 0, -1]]) + exchange(2, [[0, 1]], 1.0)
    assert minimize(f).energy == pytest.approx(-1.0, abs=1e-14)
    strong = exchange(2, [[0, 1]], 1.0) + field(2, [0, 1], [[0, 0, 1e6], [0, 0, 1e6]])
    assert minimize(strong).energy == pytest.approx(1 - 2e6, rel=1e-14)


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_minimum_does_not_change_under_site_rotations(seed):
    generator = np.random.default_rng(seed)
    pairs = [[0, 1], [1, 2], [2, 3], [0, 3], [0, 2]]
    f = exchange(4, pairs, generator.standard_normal((5, 3, 3))) + field(4, range(4), generator.standard_normal((4, 3)))
    turned = f.rotated(Rotation.random(4, generator).as_matrix())
    assert minimize(turned).energy == pytest.approx(minimize(f).energy, rel=1e-10)


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_sites_in_fields_and_anisotropies_alone(seed):
    """Quadratic, not isotropic and without a single pair: each site solves (A - mu) n = h with mu below all eigenvalues
    of A (secular equation, its root found by scipy).
    """
    generator = np.random.default_rng(seed)
    axes, strengths, fields = (
        generator.standard_normal((2, 3)),
        generator.standard_normal(2),
        [[0.3, 0, 1], [0, 1, 0.2]],
    )
    f = field(2, [0, 1], fields)
    f = sum((anisotropy(2, [k], axes[k], strengths[k]) for k in range(2)), start=f)
    expected = 0.0
    for axis, strength, h in zip(axes, strengths, np.array(fields)):
        matrix = 2 * strength * np.outer(axis, axis) / (axis @ axis)
        values, vectors = np.linalg.eigh(matrix)
        part = vectors.T @ h
        low = values[0] - np.linalg.norm(h) - 1.0
        mu = brentq(lambda m, p=part, v=values: 1 - 1 / np.linalg.norm(p / (v - m)), low, values[0] - 1e-9, xtol=1e-15)
        n = vectors @ (part / (values - mu))
        expected += 0.5 * n @ matrix @ n - h @ n
    found = find_ground_state(f)
    assert found.result.converged
    assert found.result.energy == pytest.approx(expected, rel=1e-10)
    assert found.certificate.certified


@settings(max_examples=8, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_nothing_lies_below_the_minimum(seed):
    generator = np.random.default_rng(seed)
    pairs = [[0, 1], [1, 2], [0, 2]]
    f = exchange(3, pairs, generator.standard_normal((3, 3, 3))) + biquadratic(3, pairs, generator.standard_normal(3))
    found = minimize(f, MinimizeSettings(starts=32))
    assert found.converged
    n = random_points(generator, 3, (4000,))
    assert f.value(n).min() >= found.energy - 1e-12
    # second-order condition: no direction of negative curvature at the lowest minimum
    assert np.linalg.eigvalsh(f.hessian(found.configuration))[0] > -1e-7

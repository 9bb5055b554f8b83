"""Cluster bounds against Anderson 1951 and exact energies; the ladder of inequalities on random models."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import reference, table
from scipy.optimize import minimize
from spin_models import chain, complete, cubic, heisenberg, honeycomb, kagome, pyrochlore, ring, torus

from manybody.model import couplings
from manybody.model.energy import EnergyFunction, Group
from manybody.model.quantization import RULES, UndefinedQuantization, quantize
from manybody.quantum.bounds import cluster_bound
from manybody.quantum.clusters import canonical_order, covers, split
from manybody.quantum.exact import exact_ground_state
from manybody.quantum.product_state import product_energy

SQUARE = [(1, 0), (0, 1)]
TRIANGULAR = [(1, 0), (0, 1), (1, -1)]
STARS = {
    "chain": (6, ring(6)),
    "square": (16, torus(4, 4, SQUARE)),
    "cubic": (27, cubic(3)),
    "honeycomb": (18, honeycomb(3, 3)),
}
STAR_ROWS = ["F001", "F002", "F004", "F005", "F007", "F010", "F011", "F012", "F013", "F014", "F015"]
CHAIN_ROWS = {"F017": 3, "F018": 4, "F020": 7, "F021": 9, "F023": 16, "F024": 4, "F026": 8}
COMPLETE_ROWS = {
    "F027": ("triangles", 16, torus(4, 4, TRIANGULAR)),
    "F033": ("triangles", 16, torus(4, 4, TRIANGULAR)),
    "F028": ("triangles", 27, kagome(3, 3)),
    "F034": ("triangles", 27, kagome(3, 3)),
    "F029": ("tetrahedra", 32, pyrochlore(2)),
    "F035": ("tetrahedra", 32, pyrochlore(2)),
    "F036": ("triangles", 4, complete(4)),
    "F037": ("triangles", 5, complete(5)),
    "F039": ("triangles", 8, complete(8)),
}


def test_every_row_is_covered():
    assert {key for key in table() if key.startswith("F")} == {*STAR_ROWS, *CHAIN_ROWS, *COMPLETE_ROWS, "F040"}


@pytest.mark.parametrize("identifier", STAR_ROWS)
def test_star_bounds_of_anderson(identifier):
    # Anderson 1951, Phys. Rev. 83, 1260.
    row = reference(identifier)
    sites, bonds = STARS[row.model.split()[0]]
    op = heisenberg(sites, bonds, row.spin)
    bound = cluster_bound(op, kinds=("stars",), max_dimension=300_000, max_seconds=1e6)
    assert bound.distinct == 1 and bound.clusters == sites
    assert abs(bound.value / sites - row.value) < 1e-11 + row.uncertainty
    assert row.digits(bound.value / sites) > 11


@pytest.mark.parametrize("identifier", CHAIN_ROWS)
def test_chains_from_open_pieces(identifier):
    row, size = reference(identifier), CHAIN_ROWS[identifier]
    sites = size + 2
    op = heisenberg(sites, ring(sites), row.spin)
    bound = cluster_bound(op, max_sites=16, max_dimension=20_000, kinds=(f"pieces of {size}",))
    assert bound.distinct == 1
    # Rounding and residuals, at most 1e-11 a site, are taken off the bound.
    assert -2e-11 < bound.value / sites - row.value < 1e-12
    assert row.digits(bound.value / sites) > 10.5


@pytest.mark.parametrize("identifier", COMPLETE_ROWS)
def test_triangles_and_tetrahedra(identifier):
    row, (kind, sites, bonds) = reference(identifier), COMPLETE_ROWS[identifier]
    bound = cluster_bound(heisenberg(sites, bonds, row.spin), kinds=(kind,))
    value = bound.value if row.N != "any" else bound.value / sites
    assert abs(value - row.value) < 1e-11
    assert bound.distinct == 1 and bound.largest == (3 if kind == "triangles" else 4)


def test_majumdar_ghosh_is_tight():
    row = reference("F040")
    op = heisenberg(10, ring(10) + ring(10, 2), 0.5, np.repeat([1.0, 0.5], 10))
    bound = cluster_bound(op, kinds=("triangles",))
    assert abs(bound.value / 10 - row.value) < 1e-11
    assert abs(exact_ground_state(op).energy - bound.value) < 1e-10


def test_the_best_cover_is_kept_and_named():
    bound = cluster_bound(heisenberg(14, ring(14), 0.5))
    assert bound.value == max(bound.candidates.values()) == bound.candidates[bound.kind]
    assert {"bonds", "stars"} < set(bound.candidates)
    assert bound.kind == "pieces of 13"
    tight = cluster_bound(heisenberg(14, ring(14), 0.5), max_dimension=40)
    assert "pieces of 13" in tight.skipped and tight.value < bound.value
    with pytest.raises(ValueError, match="limits"):
        cluster_bound(heisenberg(4, ring(4), 20), max_dimension=10)
    with pytest.raises(ValueError, match="tetrahedra"):
        cluster_bound(heisenberg(4, ring(4), 1), kinds=("tetrahedra",))


def test_neighbourhoods_improve_on_stars():
    square = cluster_bound(heisenberg(16, torus(4, 4, SQUARE), 0.5), kinds=("stars", "neighbourhoods of radius 2"))
    # The 4 x 4 torus has -0.701780 per site (row A230).
    assert -0.75 < square.value / 16 < reference("A230").value / 16
    assert square.kind == "neighbourhoods of radius 2"


@st.composite
def random_models(draw, sites=(1, 5)):
    n = draw(st.integers(*sites))
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    axis = random.standard_normal(3)
    f = couplings.field(n, range(n), random.standard_normal((n, 3))) + random.standard_normal()
    f = f + couplings.anisotropy(n, range(n), axis, 2 * random.standard_normal())
    pairs = [(i, j) for i, j in complete(n) if random.random() < 0.7]
    if pairs:
        f = f + couplings.exchange(n, pairs, random.standard_normal((len(pairs), 3, 3)))
        f = f + couplings.biquadratic(n, pairs[:2], 0.5 * random.standard_normal())
    triples = [t for t in itertools.combinations(range(n), 3) if random.random() < 0.2]
    if triples:
        f = f + couplings.product(n, triples, [{(1, 0, 0): 0.6}, {(0, 1, 0): 1.0, (0, 0, 1): 0.3}, {(0, 0, 1): 1.0}])
    return f


@settings(max_examples=40, deadline=None)
@given(random_models())
def test_clusters_sum_to_the_operator(f):
    for cover in covers(f, 4):
        total = EnergyFunction(f.sites, f.constant)
        for cluster, piece in zip(cover.clusters, split(f, cover), strict=True):
            back = [Group(g.key, np.array(cluster)[g.sites], g.coefficients) for g in piece.groups]
            total = total + EnergyFunction(f.sites, 0.0, back)
        assert total.allclose(f, rtol=1e-12)


@settings(max_examples=30, deadline=None)
@given(random_models(sites=(2, 5)), st.integers(0, 2**32 - 1))
def test_canonical_order_recognizes_renumbered_clusters(f, seed):
    order = np.random.default_rng(seed).permutation(f.sites)
    other = f.restricted(order)
    first = f.restricted(canonical_order(f, [1.0] * f.sites))
    second = other.restricted(canonical_order(other, [1.0] * f.sites))
    assert first.allclose(second, rtol=1e-12)


def lowest_of(symbol: EnergyFunction, seed: int = 0, starts: int = 8) -> tuple[float, np.ndarray]:
    """Minimum of an energy function from many starts with scipy on stacked vectors."""

    def objective(x):
        x = x.reshape(-1, 3)
        length = np.linalg.norm(x, axis=1, keepdims=True)
        value, gradient = symbol.value_and_gradient(x / length)
        return float(value), (gradient / length).reshape(-1)

    random = np.random.default_rng(seed)
    runs = [
        minimize(objective, random.standard_normal(3 * symbol.sites), jac=True, method="L-BFGS-B")
        for _ in range(starts)
    ]
    best = min(runs, key=lambda run: run.fun)
    n = best.x.reshape(-1, 3)
    return float(best.fun), n / np.linalg.norm(n, axis=1, keepdims=True)


@settings(max_examples=20, deadline=None)
@given(random_models(sites=(1, 3)), st.sampled_from([0.5, 1, 1.5]), st.sampled_from(RULES))
def test_the_energy_ladder(f, spin, rule):
    # min u <= E <= product <= min l (Lieb 1973), cluster bound <= E (Anderson 1951).
    try:
        op = quantize(f, spin, rule)
    except UndefinedQuantization:
        return
    exact = exact_ground_state(op)
    upper, _ = lowest_of(op.upper_symbol())
    lower, configuration = lowest_of(op.lower_symbol())
    product = product_energy(op, configuration)
    slack = 1e-9 * (1 + abs(exact.energy))
    assert upper <= exact.energy + slack
    assert cluster_bound(op).value <= exact.energy
    assert exact.energy - exact.error <= product.energy
    assert product.energy <= lower + slack
    assert product.converged


def test_separate_clusters_and_free_sites():
    f = couplings.exchange(6, [(0, 1), (3, 4)], 1.0) + couplings.field(6, [2], [0, 0, 0.5]) - 1.25
    bound = cluster_bound(quantize(f, 1))
    # Two dimers at -(S+1)/S = -2 each; the free site adds its field energy; all of it is exact.
    assert abs(bound.value + 4 + 0.5 + 1.25) < 1e-11
    alone = cluster_bound(quantize(couplings.field(3, range(3), [0, 0.6, 0.8]), 2))
    assert abs(alone.value + 3) < 1e-11 and alone.kind == "sites"


def test_open_chain_uses_pieces_over_the_ends():
    op = heisenberg(12, chain(12), 0.5)
    bound = cluster_bound(op, kinds=("pieces of 5",))
    assert bound.value <= exact_ground_state(op).energy
    # Inside all bonds have weight 1/4: bulk pieces are one and the same, pieces cut off at both ends pair up.
    assert bound.distinct == 4

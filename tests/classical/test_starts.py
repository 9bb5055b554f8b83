"""Starting configurations, and telling minima apart."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from manybody.classical import starts
from manybody.classical.distinct import Comparison
from manybody.classical.site_form import site_form
from manybody.classical.sphere_product import random_points
from manybody.model import lattice as lattices
from manybody.model.couplings import anisotropy, antisymmetric, exchange, field

seeds = st.integers(0, 2**32 - 1)


def form_of(f):
    return site_form(*f.quadratic_form(), tolerance=1e-15)


def heisenberg(lattice):
    return exchange(lattice.sites, lattice.pairs("nearest"), 1.0)


@settings(max_examples=15, deadline=None)
@given(seeds)
def test_site_form_is_the_function(seed):
    generator = np.random.default_rng(seed)
    pairs = [[0, 1], [1, 2], [2, 3], [0, 2]]
    f = exchange(4, pairs, generator.standard_normal((4, 3, 3))) + field(4, [1], generator.standard_normal(3)) + 1.5
    f += anisotropy(4, range(4), generator.standard_normal(3), 0.7)
    for g in (f, exchange(4, pairs, 0.4) - 2.0):
        form, n = form_of(g), random_points(generator, 4)
        x = n.reshape(-1)
        matrix = np.kron(form.matrix().toarray(), np.eye(3)) if form.isotropic else form.matrix().toarray()
        value = form.constant + 0.5 * x @ matrix @ x - (form.field.reshape(-1) @ x if len(form.field) else 0.0)
        assert value == pytest.approx(g.value(n), rel=1e-12, abs=1e-12)
        assert form.isotropic == (g is not f)
        # the strength bounds the gradient at every site
        assert np.linalg.norm(g.gradient(n), axis=1).max() <= form.strength() * (1 + 1e-12)


def test_placed_start_is_exact_without_frustration():
    """Bipartite, ferromagnetic, mixed signs without a frustrated loop, and a twisted open chain: the unfrustrated bound
    is reached.
    """
    generator = np.random.default_rng(0)
    tree = [[0, 1], [0, 2], [2, 3], [2, 4], [4, 5]]
    cases = [
        heisenberg(lattices.honeycomb([3, 3], periodic=True)),
        -1.0 * heisenberg(lattices.triangular([4, 4], periodic=True)),
        exchange(6, tree, generator.standard_normal((5, 1, 1))),
        heisenberg(lattices.chain(6)) + antisymmetric(6, lattices.chain(6).pairs("nearest"), [0.3, 0, 0.7]),
        exchange(6, [[0, 1], [3, 4]], 1.0),
    ]
    for f in cases:
        form = form_of(f)
        n = starts.placed_start(form, generator)
        # isotropic and gauge-rotated bonds reach it from any first direction except that of an anisotropic one
        assert f.value(n) >= starts.unfrustrated_bound(form) + form.constant - 1e-9
        if form.isotropic:
            assert f.value(n) == pytest.approx(starts.unfrustrated_bound(form) + form.constant, rel=1e-12)


@pytest.mark.parametrize("limit", [800, 10])
def test_eigenvector_starts_find_ordered_states(limit, monkeypatch):
    """120 degree state of the triangular lattice, by projection and by the filter: within the noise that is added."""
    monkeypatch.setattr(starts, "DENSE_EIGENVECTORS", limit)
    f = heisenberg(lattices.triangular([6, 6], periodic=True))
    found = starts.LowestModes(form_of(f)).starts(np.random.default_rng(0), 4)
    assert found.shape == (4, 36, 3)
    assert np.allclose(np.linalg.norm(found, axis=-1), 1.0)
    assert f.value(found).min() < -54.0 + 0.5


@settings(max_examples=20, deadline=None)
@given(seeds)
def test_distance_forgets_the_allowed_rotations_only(seed):
    generator = np.random.default_rng(seed)
    ring = lattices.ring(5)
    isotropic, axial = heisenberg(ring), exchange(5, ring.pairs("nearest"), [1, 1, 0.5])
    fixed = axial + field(5, [0], [1.0, 0, 0])
    n = random_points(generator, 5)
    turn = Rotation.random(None, generator).as_matrix()
    about_z = Rotation.from_rotvec([0, 0, generator.uniform(1, 5)]).as_matrix()
    assert Comparison(isotropic).distance(n, (n @ turn.T)[None])[0] < 1e-6
    assert Comparison(axial).distance(n, (n @ about_z.T)[None])[0] < 1e-6
    plain = np.sqrt(np.mean(np.sum((n - n @ about_z.T) ** 2, axis=1)))
    assert Comparison(fixed).distance(n, (n @ about_z.T)[None])[0] == pytest.approx(plain, rel=1e-6)
    assert (
        Comparison(axial).distance(n, (n @ turn.T)[None])[0]
        <= Comparison(fixed).distance(n, (n @ turn.T)[None])[0] + 1e-9
    )
    # a mirror image of a state that fills space is another state
    assert Comparison(isotropic).distance(n, -n[None])[0] > 1e-3


def test_clusters_turn_on_their_own_and_idle_sites_do_not_count():
    f = exchange(5, [[0, 1], [2, 3]], 1.0)
    n = random_points(np.random.default_rng(1), 5)
    other = n.copy()
    other[2:4] = n[2:4] @ Rotation.from_rotvec([1.0, 0.3, 0]).as_matrix().T
    other[4] = -n[4]
    assert Comparison(f).distance(n, other[None])[0] < 1e-6


@pytest.mark.parametrize("pairs", [[], [[7, 300], [300, 301], [7, 301]]])
def test_many_sites_with_few_or_no_couplings(pairs):
    """More sites than the matrix is diagonalized for, where Lanczos steps find little or nothing to work on."""
    bonds = np.random.default_rng(0).standard_normal((len(pairs), 3, 3))
    form = form_of(exchange(900, np.array(pairs, dtype=int).reshape(-1, 2), bonds))
    found = starts.LowestModes(form).starts(np.random.default_rng(0), 2)
    assert found.shape == (2, 900, 3)
    assert np.allclose(np.linalg.norm(found, axis=-1), 1.0)

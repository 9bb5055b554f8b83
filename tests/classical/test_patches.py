"""Patches against dense matrices and against plain Newton steps (both independent of the patches)."""

import numpy as np
import pytest

from manybody.classical import patches, vector_sweeps
from manybody.classical.minimize import MinimizeSettings, QuadraticProblem, minimize
from manybody.classical.site_form import site_form
from manybody.classical.sphere_product import normalized, random_points
from manybody.model import lattice as lattices
from manybody.model.couplings import anisotropy, exchange


def model(kind, extent=12):
    lattice = lattices.triangular([extent, extent], periodic=True)
    f = exchange(lattice.sites, lattice.pairs("nearest"), 1.0 if kind != "collinear" else -1.0)
    if kind == "blocks":
        f = f + exchange(lattice.sites, lattice.pairs("nearest"), np.diag([0.0, 0.0, -0.1]))
        f = f + anisotropy(lattice.sites, np.arange(lattice.sites), [0.0, 0.0, 1.0], 0.2)
    return f


def parts(f):
    form = site_form(*f.quadratic_form(), tolerance=1e-15)
    field = form.field if len(form.field) else np.zeros((form.sites, 3))
    return form, form.arrays[:5], field


def multipliers_of(x, arrays, field):
    multipliers = np.empty(len(x))
    vector_sweeps.gradient(x, *arrays, field, np.empty_like(x), multipliers)
    return multipliers


@pytest.mark.parametrize("kind", ["isotropic", "blocks"])
def test_restricted_hessian_is_the_dense_projection(kind):
    f = model(kind)
    _, arrays, field = parts(f)
    x = random_points(np.random.default_rng(3), f.sites)
    patch = patches.Patches(*arrays, ball=20)
    assert set(patch.label) == set(range(patch.count)) and 2 <= patch.count < f.sites / 5
    data = np.zeros((len(patch.columns), 3, 3))
    multipliers = multipliers_of(x, arrays, field)
    patches._restricted(x, patch.label, *arrays, multipliers, patch.rows, patch.columns, data)
    dense = np.zeros((3 * patch.count, 3 * patch.count))
    for a in range(patch.count):
        for k in range(patch.rows[a], patch.rows[a + 1]):
            b = patch.columns[k]
            dense[3 * a : 3 * a + 3, 3 * b : 3 * b + 3] = data[k]
    turns = np.zeros((3 * f.sites, 3 * patch.count))
    for i in range(f.sites):
        for s in range(3):
            turns[3 * i : 3 * i + 3, 3 * patch.label[i] + s] = np.cross(np.eye(3)[s], x[i])
    np.testing.assert_allclose(dense, turns.T @ f.hessian(x) @ turns, atol=1e-12)


@pytest.mark.parametrize("kind", ["isotropic", "blocks", "collinear"])
def test_preconditioner_is_symmetric_and_positive(kind):
    f = model(kind)
    _, arrays, field = parts(f)
    generator = np.random.default_rng(4)
    for x in (minimize(f, MinimizeSettings(starts=2)).configuration, random_points(generator, f.sites)):
        apply = patches.Patches(*arrays, ball=20).preconditioner(x, multipliers_of(x, arrays, field), 6.0, 1e-4)
        u, v = generator.standard_normal((2, f.sites, 3))
        u, v = (w - np.sum(w * x, axis=1, keepdims=True) * x for w in (u, v))
        pu, pv = np.empty_like(u), np.empty_like(v)
        apply(u, pu)
        apply(v, pv)
        assert np.vdot(v, pu) == pytest.approx(np.vdot(u, pv), rel=1e-8)
        assert np.vdot(u, pu) > 0
        assert np.abs(np.sum(pu * x, axis=1)).max() < 1e-9 * np.abs(pu).max()


@pytest.mark.parametrize("kind", ["isotropic", "blocks", "collinear"])
def test_newton_reaches_the_minimum_of_plain_newton_steps(kind):
    f = model(kind, 24)
    form, arrays, field = parts(f)
    lowest = minimize(f, MinimizeSettings(starts=6))
    noise = np.random.default_rng(5).standard_normal((f.sites, 3))
    x = normalized(lowest.configuration + 0.1 * noise)
    shifted = QuadraticProblem(form, MinimizeSettings()).shifted
    size = form.strength()
    energy, worst, products = patches.newton(x, arrays, shifted, field, 1e-10 * size, 0.0, size, 50, 5000)
    assert worst <= 1e-10 * form.strength()
    assert 0 < products < 5000
    assert energy + form.constant == pytest.approx(lowest.energy, rel=1e-12)
    assert float(f.value(x)) == pytest.approx(lowest.energy, rel=1e-12)

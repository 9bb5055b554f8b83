"""The surface part of the preconditioner against dense matrices."""

import numpy as np
import pytest

from manybody.classical import patches, surfaces, vector_sweeps
from manybody.classical.site_form import site_form
from manybody.classical.sphere_product import random_points
from manybody.model import lattice as lattices
from manybody.model.couplings import anisotropy, exchange


def parts(extent, periodic, blocks):
    lattice = lattices.triangular([extent, extent], periodic=periodic)
    f = exchange(lattice.sites, lattice.pairs("nearest"), -1.0)
    if blocks:
        f = f + exchange(lattice.sites, lattice.pairs("nearest"), np.diag([0.0, 0.0, -0.1]))
        f = f + anisotropy(lattice.sites, np.arange(lattice.sites), [0.0, 0.0, 1.0], 0.2)
    form = site_form(*f.quadratic_form(), tolerance=1e-15)
    return f, form.arrays[:5]


@pytest.mark.parametrize("blocks", [False, True])
def test_solver_is_the_inverse_of_the_hessian_of_the_surface(blocks, monkeypatch):
    monkeypatch.setattr(surfaces, "LAYERS", 2)
    monkeypatch.setattr(surfaces, "SHARE", 0.5)
    f, arrays = parts(14, False, blocks)
    surface = surfaces.Surface(*arrays)
    at = np.arange(f.sites)
    depth = np.min([at // 14, 13 - at // 14, at % 14, 13 - at % 14], axis=0)
    assert np.array_equal(surface.sites, np.flatnonzero(depth <= 2))
    generator = np.random.default_rng(0)
    x, v = random_points(generator, f.sites), generator.standard_normal((f.sites, 3))
    multipliers = np.empty(f.sites)
    vector_sweeps.gradient(x, *arrays, np.zeros_like(x), np.empty_like(x), multipliers)
    damping = 20.0  # more than the norm: positive at once
    out = np.ones_like(v)
    surface.solver(x, multipliers, damping, patches._positive_factors)(v, out)
    rows = (3 * surface.sites[:, None] + np.arange(3)).reshape(-1)
    shifted = (f.hessian(x) + damping * np.eye(3 * f.sites))[np.ix_(rows, rows)]
    tangent = v - np.sum(v * x, axis=1, keepdims=True) * x
    expected = np.linalg.solve(shifted, tangent[surface.sites].reshape(-1)).reshape(-1, 3)
    assert np.allclose(out[surface.sites], 1.0 + expected, atol=1e-12)
    assert (np.delete(out, surface.sites, axis=0) == 1.0).all()


def test_without_surface():
    assert surfaces.Surface(*parts(6, True, False)[1]).size == 0
    # most sites of a small open lattice are next to its boundary
    assert surfaces.Surface(*parts(6, False, True)[1]).size == 0

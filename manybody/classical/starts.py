"""Starting configurations: random, from the lowest eigenvectors of the coupling matrix, and placed along the strongest bonds."""

from collections.abc import Callable

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import breadth_first_order, connected_components, minimum_spanning_tree
from scipy.sparse.linalg import LinearOperator, eigsh

from manybody.classical.site_form import SiteForm
from manybody.classical.sphere_product import normalized

DENSE_EIGENVECTORS = 800  # matrix dimension up to which the lowest eigenspace is computed in full


def lowest_mode_starts(form: SiteForm, generator: np.random.Generator, count: int) -> np.ndarray:
    """(count, N, 3) configurations made of the lowest eigenvectors of the coupling matrix (Luttinger and Tisza 1946, Phys. Rev. 70, 954).

    Small matrices: a random vector and its normalization are projected in turn on the lowest eigenspace, which finds a
    configuration of unit vectors in that space where there is one. Large ones: random vectors filtered by a Chebyshev polynomial of
    the matrix that keeps the lowest part of the spectrum. A little noise is added, so that no start sits on a saddle point.
    """
    if form.sites * (1 if form.isotropic else 3) <= DENSE_EIGENVECTORS:
        configurations = _projected(form, generator, count)
    else:
        configurations = _filtered(form, generator, count)
    return normalized(configurations + 0.03 * generator.standard_normal(configurations.shape))


def _projected(form: SiteForm, generator: np.random.Generator, count: int) -> np.ndarray:
    energies, vectors = np.linalg.eigh(form.matrix().toarray())
    width = energies[-1] - energies[0]
    x = normalized(generator.standard_normal((count, form.sites, 3)))
    # every third start takes a wider band: with fields or on-site terms the lowest eigenspace alone says little
    for k, share in enumerate(np.resize([1e-6, 1e-6, 0.1], count)):
        basis = vectors[:, energies <= energies[0] + share * width + 1e-300]
        for _ in range(40):
            shape = (form.sites, 3) if form.isotropic else (3 * form.sites, 1)
            x[k] = normalized((basis @ (basis.T @ x[k].reshape(shape))).reshape(form.sites, 3), fallback=x[k])
    return x


def _filtered(form: SiteForm, generator: np.random.Generator, count: int) -> np.ndarray:
    from manybody.classical.vector_sweeps import product

    arrays = form.arrays[:5]
    out = np.empty((form.sites, 3))

    def apply(v):
        product(np.ascontiguousarray(v).reshape(form.sites, 3), *arrays, out)
        return out.reshape(np.shape(v)).copy()

    operator = LinearOperator((3 * form.sites,) * 2, matvec=apply, dtype=float)
    first = generator.standard_normal(3 * form.sites)
    low, high = (
        float(eigsh(operator, k=1, which=end, tol=1e-2, v0=first, return_eigenvectors=False)[0]) for end in ("SA", "LA")
    )
    width = max(high - low, 1e-300)
    degree = int(np.clip(3 * np.sqrt(form.sites), 100, 1500))
    # everything within (6 / degree)^2 of the lowest eigenvalue, relative to the width, is amplified by up to exp(12)
    cut = low + width * (6.0 / degree) ** 2
    top = high + 0.02 * width
    return np.array(
        [_chebyshev(apply, generator.standard_normal((form.sites, 3)), degree, cut, top) for _ in range(count)]
    )


def _chebyshev(apply: Callable, v: np.ndarray, degree: int, cut: float, top: float) -> np.ndarray:
    """T_degree of the matrix with [cut, top] mapped to [-1, 1], times v, rescaled on the way."""
    centre, half = (top + cut) / 2, (top - cut) / 2
    before, now = v, (apply(v) - centre * v) / half
    for k in range(degree - 1):
        after = apply(now)
        after -= centre * now
        after *= 2.0 / half
        after -= before
        before, now = now, after
        if k % 50 == 49:
            size = np.abs(now).max()
            before /= size
            now /= size
    return now


def placed_start(form: SiteForm, generator: np.random.Generator) -> np.ndarray:
    """(N, 3): sites placed one after the other along a spanning tree of the strongest bonds, each against the field of those before.

    The minimum wherever no bond is frustrated.
    """
    from manybody.classical.vector_sweeps import place

    if form.isotropic:
        size = np.abs(form.weights)
    else:
        size = np.sqrt(np.einsum("kab,kab->k", form.blocks, form.blocks))
    graph = sp.csr_array(
        (-size, form.neighbours.astype(np.int32), form.indptr.astype(np.int32)), shape=(form.sites,) * 2
    )
    count, label = connected_components(graph, directed=False)
    tree = minimum_spanning_tree(graph)
    roots = np.unique(label, return_index=True)[1]
    order = np.concatenate(
        [breadth_first_order(tree, root, directed=False, return_predecessors=False) for root in roots]
        if count <= 1000
        else [np.arange(form.sites)]
    )
    # one common axis: clusters and sites that feel no field keep it
    x = np.broadcast_to(normalized(generator.standard_normal(3)), (form.sites, 3)).copy()
    field = form.field if len(form.field) else np.zeros((form.sites, 3))
    place(x, order, form.indptr, form.neighbours, form.weights, form.blocks, field)
    return x


def unfrustrated_bound(form: SiteForm) -> float:
    """A lower bound of f - constant that is reached where no term is frustrated.

    Isotropic couplings: -1/2 sum |J_ij| - sum |h_i|; blocks: their largest singular values, and the lowest on-site eigenvalues.
    """
    if form.isotropic:
        pairs = np.abs(form.weights).sum()
    else:
        pairs = np.linalg.norm(form.blocks, ord=2, axis=(1, 2)).sum() if len(form.blocks) else 0.0
    sites = np.linalg.eigvalsh(form.diagonal)[:, 0].sum() if len(form.diagonal) else 0.0
    fields = np.linalg.norm(form.field, axis=1).sum() if len(form.field) else 0.0
    return float(-0.5 * pairs + 0.5 * sites - fields)

"""Starting configurations: random, from the lowest eigenvectors of the coupling matrix, and placed along the strongest
bonds.
"""

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import breadth_first_order, connected_components, minimum_spanning_tree
from scipy.sparse.linalg import LinearOperator, eigsh

from manybody.classical.site_form import SiteForm
from manybody.classical.sphere_product import normalized

FILTER_ROUNDS = 8
DENSE_EIGENVECTORS = 800  # matrix dimension up to which the lowest eigenspace is computed in full


def lowest_mode_starts(form: SiteForm, generator: np.random.Generator, count: int) -> np.ndarray:
    """(count, N, 3) configurations made of the lowest eigenvectors of the coupling matrix (Luttinger and Tisza 1946,
    Phys. Rev. 70, 954).

    Small matrices: a random vector and its normalization are projected in turn on the lowest eigenspace, which finds a
    configuration of unit vectors in that space where there is one. Large ones: the projection is a Chebyshev polynomial
    of the matrix that keeps the lowest part of the spectrum. A little noise is added, so that no start sits on a saddle
    point.
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
    """Filter and normalize in turn: the nonlinear step sorts out a single domain where the filter
    alone leaves several.
    """
    from manybody.classical.vector_sweeps import filter_step, gradient, product

    arrays = form.arrays[:5]
    out, multipliers = np.empty((form.sites, 3)), np.empty(form.sites)
    none = np.zeros((form.sites, 3))

    def apply(v):
        product(np.ascontiguousarray(v).reshape(form.sites, 3), *arrays, out)
        return out.reshape(np.shape(v)).copy()

    operator = LinearOperator((3 * form.sites,) * 2, matvec=apply, dtype=float)
    first = generator.standard_normal(3 * form.sites)
    degree = int(np.clip(2 * np.sqrt(form.sites), 100, 1500))
    # the filter is only as sharp as the lowest eigenvalue is known
    accuracy = {"SA": 0.2 * (6.0 / degree) ** 2, "LA": 1e-2}
    low, high = (
        float(eigsh(operator, k=1, which=end, tol=tol, v0=first, ncv=40, return_eigenvectors=False)[0])
        for end, tol in accuracy.items()
    )
    width = max(high - low, 1e-300)
    # everything within (6 / degree)^2 of the lowest eigenvalue, relative to the width, is amplified by up to exp(12)
    cut, top = low + width * (6.0 / degree) ** 2, high + 0.02 * width
    centre, half = (top + cut) / 2, (top - cut) / 2
    found = []
    for _ in range(count):
        x = generator.standard_normal((form.sites, 3))
        energy = np.inf
        for _ in range(FILTER_ROUNDS):
            before, now = x.copy(), x
            product(before, *arrays, out)
            now = (out - centre * before) / half
            for k in range(degree - 1):
                filter_step(now, before, *arrays, centre, 2.0 / half, out)
                before, now = now, before
                if k % 50 == 49:
                    size = np.abs(now).max()
                    before /= size
                    now /= size
            x = normalized(now)
            last, energy = energy, gradient(x, *arrays, none, out, multipliers)[0]
            if energy > last - 1e-4 * abs(energy):
                break
        found.append(x)
    return np.array(found)


def placed_start(form: SiteForm, generator: np.random.Generator) -> np.ndarray:
    """(N, 3): sites placed one after the other along a spanning tree of the strongest bonds, each against the field of
    those before.

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

    Isotropic couplings: -1/2 sum |J_ij| - sum |h_i|; blocks: their largest singular values, and the lowest on-site
    eigenvalues.
    """
    if form.isotropic:
        pairs = np.abs(form.weights).sum()
    else:
        pairs = np.linalg.norm(form.blocks, ord=2, axis=(1, 2)).sum() if len(form.blocks) else 0.0
    sites = np.linalg.eigvalsh(form.diagonal)[:, 0].sum() if len(form.diagonal) else 0.0
    fields = np.linalg.norm(form.field, axis=1).sum() if len(form.field) else 0.0
    return float(-0.5 * pairs + 0.5 * sites - fields)

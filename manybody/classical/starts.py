"""Starting configurations: random, from the lowest eigenvectors of the coupling matrix, and placed along the strongest
bonds.
"""

import contextlib
import functools

import numpy as np
import scipy.sparse as sp
from scipy.linalg import eigvalsh_tridiagonal
from scipy.sparse.csgraph import breadth_first_order, connected_components, minimum_spanning_tree
from scipy.sparse.linalg import ArpackError, LinearOperator, eigsh

from manybody.classical.site_form import SiteForm
from manybody.classical.sphere_product import normalized, random_points
from manybody.classical.translations import PlaneWaves

FILTER_ROUNDS = 8
MANY = 100_000  # sites beyond which the filter is set up by plain Lanczos steps, and half the rounds must do
DENSE_EIGENVECTORS = 800  # matrix dimension up to which the lowest eigenspace is computed in full


class LowestModes:
    """Configurations made of the lowest eigenvectors of the coupling matrix (Luttinger, Tisza 1946, Phys. Rev. 70,
    954).

    Small matrices: a random vector and its normalization are projected in turn on the lowest eigenspace, which finds a
    configuration of unit vectors in that space where there is one. Large ones: the projection is a Chebyshev polynomial
    of the matrix that keeps the lowest part of the spectrum; the normalization in between sorts out a single domain
    where the filter alone leaves several; where there are plane waves, the lowest of them are combined instead. A
    little noise is added, so that no start sits on a saddle point.
    """

    def __init__(self, form: SiteForm, waves: PlaneWaves | None = None):
        self.form, self.waves = form, waves
        self.small = form.sites * (1 if form.isotropic else 3) <= DENSE_EIGENVECTORS

    def starts(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """(count, N, 3)"""
        if not len(self.form.neighbours) and not len(self.form.diagonal):
            return random_points(generator, self.form.sites, (count,))
        draw = self._projected if self.small else self._filtered if self.waves is None else self._waving
        # every third start takes a wider band: with fields or on-site terms the lowest eigenspace alone says little
        x = np.array([draw(generator, wide=k % 3 == 2) for k in range(count)]).reshape(count, self.form.sites, 3)
        return normalized(x + 0.03 * generator.standard_normal(x.shape))

    def _waving(self, generator: np.random.Generator, wide: bool) -> np.ndarray:
        return self._filtered(generator, wide) if wide else self.waves.start(generator)

    @functools.cached_property
    def _eigenvectors(self) -> tuple[np.ndarray, np.ndarray]:
        return np.linalg.eigh(self.form.matrix().toarray())

    def _projected(self, generator: np.random.Generator, wide: bool) -> np.ndarray:
        form, (energies, vectors) = self.form, self._eigenvectors
        share = 0.1 if wide else 1e-6
        basis = vectors[:, energies <= energies[0] + share * (energies[-1] - energies[0]) + 1e-300]
        shape = (form.sites, 3) if form.isotropic else (3 * form.sites, 1)
        x = normalized(generator.standard_normal((form.sites, 3)))
        for _ in range(40):
            x = normalized((basis @ (basis.T @ x.reshape(shape))).reshape(form.sites, 3), fallback=x)
        return x

    @functools.cached_property
    def _band(self) -> tuple[int, float, float]:
        """Degree of the filter, lower and upper end of the part of the spectrum that it suppresses."""
        from manybody.classical.vector_sweeps import product

        form = self.form
        out = np.empty((form.sites, 3))

        def apply(v):
            product(np.ascontiguousarray(v).reshape(form.sites, 3), *form.arrays[:5], out)
            return out.reshape(np.shape(v)).copy()

        size = 3 * form.sites
        operator = LinearOperator((size, size), matvec=apply, dtype=float)
        first = np.random.default_rng(0).standard_normal(size)
        degree = int(np.clip(2 * np.sqrt(form.sites), 100, 1000))
        # everything within (6 / degree)^2 of the lowest eigenvalue, relative to the width, is amplified by up to
        # exp(12); the filter is only as sharp as the lowest eigenvalue is known
        sharpness = (6.0 / degree) ** 2
        ends = None
        if form.sites <= MANY:
            with contextlib.suppress(ArpackError):  # it breaks down where few sites are coupled
                ends = [
                    float(eigsh(operator, k=1, which=end, tol=tol, v0=first, ncv=40, return_eigenvectors=False)[0])
                    for end, tol in {"SA": 0.2 * sharpness, "LA": 1e-2}.items()
                ]
        low, high = ends or _spectrum_ends(form.matrix().dot if form.isotropic else apply, first, form, degree)
        width = max(high - low, 1e-300)
        return degree, low + width * sharpness, high + 0.02 * width

    def _filtered(self, generator: np.random.Generator, wide: bool) -> np.ndarray:
        from manybody.classical.vector_sweeps import filter_step, gradient, product

        form, arrays = self.form, self.form.arrays[:5]
        degree, cut, top = self._band
        centre, half = (top + cut) / 2, (top - cut) / 2
        out, multipliers, none = np.empty((form.sites, 3)), np.empty(form.sites), np.zeros((form.sites, 3))
        x = generator.standard_normal((form.sites, 3))
        energy = np.inf
        for _ in range(2 if wide else FILTER_ROUNDS if form.sites <= MANY else FILTER_ROUNDS // 2):
            before = x.copy()
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
        return x


def _spectrum_ends(apply, first: np.ndarray, form: SiteForm, steps: int) -> tuple[float, float]:
    """Lowest and highest eigenvalue by Lanczos steps that keep three vectors only: copies of converged values appear,
    but the ends stay right.
    """
    now = first[: form.sites] if form.isotropic else first
    now, before = now / np.linalg.norm(now), np.zeros_like(now)
    diagonal, beside = [], [0.0]
    for _ in range(steps):
        image = apply(now) - beside[-1] * before
        diagonal.append(float(image @ now))
        image -= diagonal[-1] * now
        beside.append(float(np.linalg.norm(image)))
        if beside[-1] <= 1e-12 * max(abs(diagonal[0]), *beside, 1e-300):
            break
        before, now = now, image / beside[-1]
    ends = eigvalsh_tridiagonal(np.array(diagonal), np.array(beside[1:-1]))
    return float(ends[0]), float(ends[-1])


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

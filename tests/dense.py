"""Dense operators built in the tests alone: coherent-state integrals and Kronecker products."""

import functools
import itertools

import numpy as np
from hypothesis import strategies as st

from manybody.model.spin_matrices import coherent_states, harmonic_operators


def sphere_rule(degree):
    """Product quadrature on the sphere, exact to `degree`: points (P, 3), weights summing to 1."""
    z, w = np.polynomial.legendre.leggauss(degree // 2 + 2)
    phi = 2 * np.pi * np.arange(degree + 2) / (degree + 2)
    points = [[np.sqrt(1 - a * a) * np.cos(b), np.sqrt(1 - a * a) * np.sin(b), a] for a in z for b in phi]
    return np.array(points), np.repeat(w / 2 / len(phi), len(phi))


def toeplitz_by_quadrature(function, spin, degree):
    """prod (2S+1)/(4 pi) int f |n><n| dn of one site, for f of the given degree."""
    points, weights = sphere_rule(degree + round(4 * spin))
    states = coherent_states(points, spin)
    return (2 * spin + 1) * np.einsum("s,sm,sk->mk", weights * function(points), states, states.conj())


def dense_operator(op):
    """The matrix of a SpinOperator by numpy.kron, site 0 slowest."""
    sizes = [round(2 * s) + 1 for s in op.spins]
    total = op.symbol.constant * np.eye(int(np.prod(sizes)), dtype=complex)
    for group in op.symbol.groups:
        for sites, tensor in zip(group.sites, group.coefficients, strict=True):
            for index in itertools.product(*[range(n) for n in tensor.shape]):
                if tensor[index] == 0:
                    continue
                factors = [np.eye(size) for size in sizes]
                for site, (rank, _), q in zip(sites, group.key, index, strict=True):
                    factors[site] = harmonic_operators(float(op.spins[site]), rank)[q]
                total += tensor[index] * functools.reduce(np.kron, factors)
    return total


def ground_energy(matrix):
    return float(np.linalg.eigvalsh(matrix)[0])


def unit_vectors(seed, *shape):
    n = np.random.default_rng(seed).normal(size=(*shape, 3))
    return n / np.linalg.norm(n, axis=-1, keepdims=True)


spins = st.sampled_from([0.5, 1.0, 1.5, 2.0, 2.5])
seeds = st.integers(0, 2**32 - 1)


def random_polynomial(rng, degree, terms=4):
    """A random polynomial of one unit vector up to `degree`, as {exponents: coefficient}."""
    exponents = [e for e in itertools.product(range(degree + 1), repeat=3) if sum(e) <= degree]
    chosen = rng.choice(len(exponents), size=min(terms, len(exponents)), replace=False)
    return {exponents[i]: float(rng.normal()) for i in chosen}


def polynomial_value(polynomial, n):
    return sum(c * np.prod(np.asarray(n) ** np.array(e), axis=-1) for e, c in polynomial.items())

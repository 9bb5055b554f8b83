"""Compressed matrix-product operators against Kronecker products, and how many channels they need."""

import numpy as np
import pytest
from dense import dense_operator, seeds
from hypothesis import given, settings
from hypothesis import strategies as st
from random_operators import random_operator
from spin_models import chain, complete, heisenberg

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.matrix_product_operator import END, START, composite
from manybody.quantum.problem import prepare


def contracted(sites, dims):
    """Dense matrix of a list of OperatorSites, position 0 slowest."""
    channels = {START: np.eye(1)}
    for site, d in zip(sites, dims, strict=True):
        matrices = {}
        for (a, b, out, into), weight in zip(site.entries.tolist(), site.weights.tolist(), strict=True):
            matrices.setdefault((a, b), np.zeros((d, d), complex))[out, into] += weight
        following = {}
        for (a, b), matrix in matrices.items():
            if a in channels:
                following[b] = following.get(b, 0) + np.kron(channels[a], matrix)
        channels = following
    return channels.get(END, np.zeros((np.prod(dims),) * 2))


def solved_frame(problem):
    """Dense matrix, constant left out, of the operator a Problem stands for, sites in sweep order."""
    turned = problem.operator.rotated(problem.frames)
    n = turned.sites
    matrix = dense_operator(turned) - problem.constant * np.eye(int(np.prod(2 * turned.spins + 1)))
    shape = [round(2 * s) + 1 for s in turned.spins]
    axes = [*problem.order, *(problem.order + n)]
    return matrix.reshape(shape * 2).transpose(axes).reshape(matrix.shape)


@settings(max_examples=20, deadline=None)
@given(seeds, st.booleans())
def test_equals_the_operator_sum_with_and_without_conserved_charge(seed, conserved):
    rng = np.random.default_rng(seed)
    op = random_operator(rng, conserved)
    problem = prepare(op, rng.standard_normal((op.sites, 3)))
    assert problem.conserved or not conserved
    dims = problem.levels.tolist()
    ours = contracted(problem.sites, dims)
    np.testing.assert_allclose(ours, solved_frame(problem), atol=1e-11 * problem.norm)
    if problem.real:
        assert all(np.isrealobj(site.weights) for site in problem.sites)
    pair = composite(problem.sites[0], problem.sites[1], (dims[0], dims[1]))
    joined = contracted([pair, *problem.sites[2:]], [dims[0] * dims[1], *dims[2:]])
    np.testing.assert_allclose(joined, ours, atol=1e-11 * problem.norm)


def widths(op):
    return [site.delta_right.size for site in prepare(op, np.eye(3)[np.zeros(op.sites, int)]).sites]


def test_channels_are_as_few_as_the_rank_of_the_couplings_across_a_cut():
    n = 40
    assert max(widths(heisenberg(n, chain(n), 2.0))) == 5
    # Rank one across every cut: all equal, and exponentially decaying.
    assert max(widths(heisenberg(n, complete(n), 0.5))) == 5
    decay = np.array([0.7 ** (j - i) for i, j in complete(n)])
    assert max(widths(heisenberg(n, complete(n), 0.5, decay))) == 5
    # Random couplings between all: at most three channels per site of the smaller side.
    random = heisenberg(n, complete(n), 0.5, np.random.default_rng(1).standard_normal(n * (n - 1) // 2))
    assert max(widths(random)) == 2 + 3 * n // 2


@pytest.mark.parametrize("direction", [[0, 0, 1.0], [1.0, 1.0, 1.0], [1.0, 0, 0]])
def test_antisymmetric_exchange_on_a_chain_stays_real_along_any_axis(direction):
    n = 6
    axis = np.array(direction) / np.linalg.norm(direction)
    matrix = np.eye(3) + 0.4 * np.outer(axis, axis)
    f = couplings.exchange(n, chain(n), matrix) + couplings.antisymmetric(n, chain(n), 0.6 * axis)
    problem = prepare(quantize(f, 1), np.eye(3)[np.zeros(n, int)])
    assert problem.conserved and problem.real
    assert abs(abs(problem.axis @ axis) - 1) < 1e-12

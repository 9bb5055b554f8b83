"""Orders of sites: what they cost, and that a shuffled graph is put straight again."""

import numpy as np
from dense import seeds
from hypothesis import given, settings
from spin_models import chain, complete, ladder, ring

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.problem import prepare
from manybody.quantum.site_order import cost, edge_list, interaction_graph, site_order


def graph_energy(n, pairs):
    return couplings.exchange(n, np.array(pairs), 1.0)


@settings(max_examples=20, deadline=None)
@given(seeds)
def test_shuffled_chains_and_ladders_come_back_at_the_cost_of_the_plain_ones(seed):
    rng = np.random.default_rng(seed)
    for n, pairs in ((16, chain(16)), (12, ladder(6, False))):
        numbers = rng.permutation(n)
        shuffled = graph_energy(n, [(numbers[i], numbers[j]) for i, j in pairs])
        order = site_order(shuffled)
        assert sorted(order) == list(range(n))
        plain = cost(np.arange(n), edge_list(interaction_graph(graph_energy(n, pairs))))
        assert cost(order, edge_list(interaction_graph(shuffled))) <= plain + 1e-9


def test_good_orders_are_kept_and_rings_folded():
    np.testing.assert_array_equal(site_order(graph_energy(20, chain(20))), np.arange(20))
    np.testing.assert_array_equal(site_order(graph_energy(6, complete(6))), np.arange(6))
    order = site_order(graph_energy(30, ring(30)))
    place = np.argsort(order)
    assert max(abs(place[i] - place[j]) for i, j in ring(30)) == 2


def test_wide_lattice_runs_along_its_long_side():
    # Sites number along the short direction slowest: 4 rows of 10, so plain numbering has 10 open sites at a cut.
    pairs = [(10 * x + y, 10 * x + y + 1) for x in range(4) for y in range(9)]
    pairs += [(10 * x + y, 10 * (x + 1) + y) for x in range(3) for y in range(10)]
    op = quantize(graph_energy(40, pairs), 0.5)
    assert prepare(op, np.eye(3)[np.zeros(40, int)]).width <= 2 + 3 * 6

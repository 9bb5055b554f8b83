"""Lattices against cases drawn by hand, coordination numbers of the textbooks, and brute-force distances."""

import contextlib
import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from reference import reference

from manybody.model import lattice as lt
from manybody.model.lattice_cells import CELLS, shells


def pairs(lattice, name="nearest"):
    return [tuple(map(int, pair)) for pair in lattice.pairs(name)]


def unordered(found):
    return {frozenset(pair) for pair in found}


def test_chain_and_ring_by_hand():
    assert pairs(lt.chain(4)) == [(0, 1), (1, 2), (2, 3)]
    assert pairs(lt.chain(4), "third") == [(0, 3)]
    assert pairs(lt.chain(1)) == [] and lt.chain(1).sites == 1
    assert pairs(lt.ring(5)) == [(0, 1), (1, 2), (2, 3), (3, 4), (4, 0)]
    assert pairs(lt.ring(5), "second") == [(0, 2), (1, 3), (2, 4), (3, 0), (4, 1)]
    assert lt.chain(6, periodic=True) == lt.ring(6)


def test_ladder_by_hand():
    open_ladder = lt.ladder(6)
    assert pairs(open_ladder, "leg") == [(0, 2), (1, 3), (2, 4), (3, 5)]
    assert pairs(open_ladder, "rung") == [(0, 1), (2, 3), (4, 5)]
    assert unordered(pairs(open_ladder, "second")) == unordered([(0, 3), (1, 2), (2, 5), (3, 4)])
    assert pairs(open_ladder, "third") == [(0, 4), (1, 5)]
    assert (
        len(pairs(lt.ladder(8, periodic=True))) == 12
    )  # the cube graph: reference/A139 calls it the periodic 2x4 ladder
    assert np.allclose(open_ladder.positions[3], [1, 1, 0])


def test_square_by_hand():
    lattice = lt.square([3, 2])
    assert pairs(lattice, "a") == [(0, 2), (1, 3), (2, 4), (3, 5)]
    assert pairs(lattice, "b") == [(0, 1), (2, 3), (4, 5)]
    assert unordered(pairs(lattice, "second")) == unordered([(0, 3), (1, 2), (2, 5), (3, 4)])
    assert pairs(lattice, "third") == [(0, 4), (1, 5)]
    cylinder = lt.square([3, 2], [True, False])
    assert unordered(pairs(cylinder)) == unordered([*pairs(lattice), (4, 0), (5, 1)])
    assert (4, 0) in pairs(cylinder, "a")  # the bond that wraps keeps the direction


def test_triangular_by_hand():
    lattice = lt.triangular([2, 2])
    assert pairs(lattice, "a") == [(0, 2), (1, 3)]
    assert pairs(lattice, "b") == [(0, 1), (2, 3)]
    assert pairs(lattice, "c") == [(2, 1)]


def test_honeycomb_by_hand():
    lattice = lt.honeycomb([2, 2])
    assert pairs(lattice, "c") == [(0, 1), (2, 3), (4, 5), (6, 7)]
    assert pairs(lattice, "a") == [(4, 1), (6, 3)]
    assert pairs(lattice, "b") == [(2, 1), (6, 5)]


def test_kagome_by_hand():
    lattice = lt.kagome([2, 1])
    assert pairs(lattice, "a") == [(0, 1), (1, 3), (3, 4)]
    assert pairs(lattice, "b") == [(0, 2), (3, 5)]
    assert pairs(lattice, "c") == [(1, 2), (4, 5)]
    # Bonds per cell as the reference kagome tori count them: AB, BC, AC, B-A(x+1), C-A(y+1), B-C(x+1, y-1).
    torus = lt.kagome([3, 3], True)

    def site(x, y, s):
        return 3 * ((x % 3) * 3 + y % 3) + s

    listed = []
    for x in range(3):
        for y in range(3):
            a, b, c = (site(x, y, s) for s in range(3))
            listed += [
                (a, b),
                (b, c),
                (a, c),
                (b, site(x + 1, y, 0)),
                (c, site(x, y + 1, 0)),
                (b, site(x + 1, y - 1, 2)),
            ]
    assert unordered(pairs(torus)) == unordered(listed) and len(pairs(torus)) == len(listed)


def test_cubic_and_graphs_by_hand():
    assert pairs(lt.cubic([2, 1, 2]), "a") == [(0, 2), (1, 3)]
    assert pairs(lt.cubic([2, 1, 2]), "c") == [(0, 1), (2, 3)]
    assert pairs(lt.complete(3)) == [(0, 1), (0, 2), (1, 2)]
    assert pairs(lt.bipartite([2, 3])) == [(0, 2), (0, 3), (0, 4), (1, 2), (1, 3), (1, 4)]
    assert pairs(lt.star(4)) == [(0, 1), (0, 2), (0, 3)]
    assert pairs(lt.chain(3), "all") == [(0, 1), (0, 2), (1, 2)]


# Coordination numbers of the first three shells, from any table of lattice neighbours (from memory); kagome's third
# shell is 4 along the lines and 2 across the hexagons.
COORDINATION = {
    "square": (4, 4, 4),
    "triangular": (6, 6, 6),
    "honeycomb": (3, 6, 3),
    "kagome": (4, 4, 6),
    "cubic": (6, 12, 8),
}


@pytest.mark.parametrize("shape", COORDINATION)
def test_coordination_numbers(shape):
    extent = (7,) * lt.DIMENSIONS[shape]
    torus = lt.lattice(shape, extent=extent, periodic=True)
    for shell, number in zip(("nearest", "second", "third"), COORDINATION[shape], strict=True):
        counts = np.bincount(torus.pairs(shell).ravel(), minlength=torus.sites)
        assert np.all(counts == number), shell
    assert sum(len(torus.pairs(direction)) for direction in torus.directions) == len(torus.pairs())


@pytest.mark.parametrize("shape", CELLS)
def test_shells_are_true_distances_on_open_lattices(shape):
    """Every pair at one of the three smallest distances, found by comparing all positions, and no other."""
    lattice = lt.lattice(
        shape,
        **({"sites": 10} if shape in lt.BY_SITES else {"extent": (4, 5, 3)[: lt.DIMENSIONS[shape]]}),
    )
    where = lattice.positions
    i, j = np.triu_indices(len(where), 1)
    distance = np.linalg.norm(where[i] - where[j], axis=1).round(6)
    for shell, length in zip(("nearest", "second", "third"), np.unique(distance), strict=False):
        close = distance == length
        expected = unordered(zip(i[close].tolist(), j[close].tolist(), strict=True))
        found = pairs(lattice, shell)
        assert unordered(found) == expected and len(found) == len(expected), shell
    assert np.isclose(distance.min(), 1)


@pytest.mark.parametrize("shape", CELLS)
def test_nearest_kinds_are_the_nearest_shell(shape):
    """The nearest bonds are written out for their orientation: they must be the shell that distances give."""
    cell = CELLS[shape]
    vectors, basis = np.array(cell.vectors), np.array(cell.basis)
    for direction in cell.directions:
        along = [
            basis[t] - basis[s] + np.array(step) @ vectors for name, (s, t, step) in cell.bonds if name == direction
        ]
        assert np.allclose(along, along[0])  # one direction, one orientation
    lengths = [
        np.linalg.norm(basis[t] - basis[s] + np.array(step) @ vectors) for s, t, step in shells(shape)["nearest"]
    ]
    assert np.allclose(lengths, 1)


@given(
    st.sampled_from(["square", "triangular", "honeycomb", "kagome"]),
    st.tuples(st.integers(1, 6), st.integers(1, 6)),
    st.tuples(st.booleans(), st.booleans()),
    st.sampled_from(["nearest", "second", "third"]),
)
def test_no_pair_is_doubled(shape, extent, periodic, shell):
    """A torus either refuses a shell or has every pair once, no site with itself, nothing of a nearer shell."""
    torus = lt.lattice(shape, extent=extent, periodic=periodic)
    try:
        found = pairs(torus, shell)
        assert torus.count_pairs(shell) == len(found)
    except ValueError as error:
        assert "too small" in str(error)
        assert any(wraps and length <= 6 for wraps, length in zip(periodic, extent, strict=True))
        return
    assert len(unordered(found)) == len(found)
    assert all(i != j and min(i, j) >= 0 and max(i, j) < torus.sites for i, j in found)
    for nearer in ("nearest", "second")[: ("nearest", "second", "third").index(shell)]:
        with contextlib.suppress(ValueError):  # the nearer shell itself may be refused
            assert not unordered(found) & unordered(pairs(torus, nearer))


@pytest.mark.parametrize(
    ("torus", "shell", "word"),
    [
        (lt.square([2, 4], True), "nearest", "twice"),
        (lt.square([1, 4], [True, False]), "nearest", "same site"),
        (lt.ring(3), "second", "'nearest' already"),
        (lt.ring(4), "second", "twice"),
        (lt.ring(5), "third", "'second' already"),
        (lt.square([4, 4], True), "third", "twice"),
        (lt.kagome([1, 1], True), "nearest", "twice"),
        (lt.triangular([3, 3], True), "second", "twice"),
        (lt.honeycomb([1, 3], True), "nearest", "twice"),
    ],
)
def test_too_small_torus_is_refused(torus, shell, word):
    with pytest.raises(ValueError, match="too small") as caught:
        torus.pairs(shell)
    assert word in str(caught.value)


def test_two_colouring():
    assert lt.chain(5).select_sites("even").tolist() == [0, 2, 4]
    assert lt.square([2, 3]).select_sites("odd").tolist() == [1, 3, 5]
    assert lt.star(4).select_sites("even").tolist() == [0]
    assert lt.bipartite([2, 3]).select_sites("odd").tolist() == [2, 3, 4]
    honeycomb = lt.honeycomb([3, 3], True)
    assert honeycomb.colouring().tolist() == [0, 1] * 9
    for frustrated in (lt.ring(5), lt.triangular([3, 3]), lt.kagome([2, 2], True), lt.complete(3)):
        with pytest.raises(ValueError, match="no even and odd"):
            frustrated.select_sites("even")
    assert lt.table([(1, 0), (3, 2), (1, 2)], sites=6).colouring().tolist() == [0, 1, 0, 1, 0, 0]


def test_select_sites():
    assert lt.chain(3).select_sites("every").tolist() == [0, 1, 2]
    assert lt.chain(3).select_sites([2, 0]).tolist() == [2, 0]
    for wrong, word in (
        ([3], "does not exist"),
        ([-1], "does not exist"),
        ([1, 1], "twice"),
        ([], "empty"),
        ("red", "allowed"),
    ):
        with pytest.raises(ValueError, match=word):
            lt.chain(3).select_sites(wrong)


def test_table():
    lattice = lt.table(
        [(1, 0), (1, 2), (2, 0)],
        labels=["strong", "weak", "strong"],
        exchange=[1.0, [1, 2, 3], np.arange(9).reshape(3, 3)],
    )
    assert lattice.sites == 3 and lattice.selections == ("all", "strong", "weak")
    assert pairs(lattice, "strong") == [(1, 0), (2, 0)]  # as listed
    assert np.allclose(lattice.exchange("weak"), [np.diag([1, 2, 3])])
    assert np.allclose(lattice.exchange("all")[2], np.arange(9).reshape(3, 3))
    assert lt.table([(0, 1)], sites=4).sites == 4
    for wrong, word in (
        ({"pairs": [(0, 0)]}, "itself"),
        ({"pairs": [(0, 1), (1, 0)]}, "twice"),
        ({"pairs": [(0, 5)], "sites": 3}, "run from 0 to 2"),
        ({"pairs": [(-1, 0)]}, "run from"),
        ({"pairs": []}, "no pair"),
        ({"pairs": [(0, 1)], "labels": ["nearest"]}, "name of a shell"),
        ({"pairs": [(0, 1)], "exchange": [float("nan")]}, "finite"),
        ({"pairs": [(0, 1)], "positions": [(0, 0, 0)]}, "positions"),
    ):
        with pytest.raises(ValueError, match=word):
            lt.table(**wrong)
    doubled = lt.table([(0, 1), (1, 0)], labels=["x1", "y1"])
    assert len(doubled.pairs("x1")) == 1
    with pytest.raises(ValueError, match="several labels"):
        doubled.pairs("all")


def test_misuse_is_told():
    for call, word in (
        (lambda: lt.ladder(5), "even number"),
        (lambda: lt.ring(2), "at least 3"),
        (lambda: lt.square([0, 3]), "at least 1"),
        (lambda: lt.cubic([2, 2]), "3 numbers"),
        (lambda: lt.square([3, 3], [True]), "1 entries"),
        (lambda: lt.lattice("pentagonal", sites=5), "allowed are"),
        (lambda: lt.lattice("square", sites=9), "extent"),
        (lambda: lt.lattice("chain", extent=[4]), "sites = N"),
        (lambda: lt.chain(3).pairs("rung"), "it has nearest, second, third, all"),
        (lambda: lt.star(3).pairs("second"), "nearest, all"),
        (lambda: lt.chain(3).exchange(), "no exchange table"),
        (lambda: lt.square([4000, 4000]).pairs("all"), "at most"),
    ):
        with pytest.raises(ValueError, match=word):
            call()


def test_small_hashable_and_picklable():
    big = lt.triangular([1000, 1000], True)
    assert len(pickle.dumps(big)) < 300 and pickle.loads(pickle.dumps(big)) == big
    assert hash(big) == hash(lt.triangular((1000, 1000), [True, True]))


@pytest.mark.slow
def test_million_sites():
    big = lt.triangular([1000, 1000], True)
    assert big.pairs().shape == (3_000_000, 2) and big.pairs("third").shape == (3_000_000, 2)
    assert big.positions.shape == (1_000_000, 3)
    assert lt.square([1000, 1000], True).colouring().sum() == 500_000


def classical_best(lattice, states):
    i, j = lattice.pairs().T
    return min(float(np.sum(state[i] * state[j])) for state in states)


def test_classical_energies_of_reference_states():
    """Energies of the known classical ground states on our pairs: D040, D041, D043, D044 per site."""
    for lattice, identifier in (
        (lt.triangular([3, 3], True), "D040"),
        (lt.kagome([3, 3], True), "D041"),
        (lt.honeycomb([3, 3], True), "D043"),
        (lt.square([4, 4], True), "D044"),
    ):
        if identifier in ("D043", "D044"):
            state = np.outer(1 - 2 * lattice.colouring(), [0, 0, 1.0])
        else:
            cell = np.arange(lattice.sites) if identifier == "D040" else None
            third = (cell // 3 - cell % 3) if cell is not None else np.arange(lattice.sites) % 3
            angle = 2 * np.pi * third / 3
            state = np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=1)
        row = reference(identifier)
        assert row.digits(classical_best(lattice, [state]) / lattice.sites) > 12, identifier


def spin_half_ground_energy(lattice):
    """Smallest eigenvalue of sum S_i.S_j, S = 1/2, by exchange of neighbours: S_i.S_j = P_ij/2 - 1/4."""
    from scipy.sparse.linalg import LinearOperator, eigsh

    count, bonds = lattice.sites, lattice.pairs()
    states = np.arange(2**count)
    states = states[np.bitwise_count(states) == count // 2]
    targets = []
    for i, j in bonds:
        differ = ((states >> i) ^ (states >> j)) & 1
        targets.append(np.searchsorted(states, states ^ (differ << i) ^ (differ << j)))

    def apply(vector):
        vector = vector.ravel()
        return sum(vector[target] for target in targets) / 2 - len(bonds) / 4 * vector

    operator = LinearOperator((len(states), len(states)), matvec=apply, dtype=float)
    start = np.random.default_rng(1).normal(size=len(states))
    return float(eigsh(operator, k=1, which="SA", v0=start, tol=1e-12)[0][0])


@pytest.mark.parametrize(
    ("identifier", "lattice"),
    [
        ("A007", lt.ring(9)),
        ("A139", lt.ladder(8, periodic=True)),
        ("A139", lt.cubic([2, 2, 2])),
        ("A230", lt.square([4, 4], True)),
        ("A238", lt.triangular([3, 3], True)),
        ("A115", lt.bipartite([3, 3])),
        ("A126", lt.star(6)),
        ("A102", lt.complete(7)),
        pytest.param("A241", lt.honeycomb([3, 3], True), marks=pytest.mark.slow),
    ],
)
def test_quantum_energies_of_reference_rows(identifier, lattice):
    row = reference(identifier)
    assert lattice.sites == row.sites
    assert row.digits(spin_half_ground_energy(lattice)) > 9

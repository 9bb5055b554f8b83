"""Terms of a workflow file against the sums they stand for, written out in the test."""

import numpy as np
import pytest

from manybody.model import lattice as lt
from manybody.model.terms import Term, energy_function, term_function, unit_axis

RNG = np.random.default_rng(5)
LATTICE = lt.triangular([2, 3])


def configuration(sites):
    n = RNG.normal(size=(sites, 3))
    return n / np.linalg.norm(n, axis=1, keepdims=True)


def test_every_kind_is_the_sum_it_stands_for():
    n = configuration(LATTICE.sites)
    i, j = LATTICE.pairs("nearest").T
    dot = np.sum(n[i] * n[j], axis=1)
    matrix, vector = RNG.normal(size=(3, 3)), RNG.normal(size=3)
    axis = vector / np.linalg.norm(vector)
    cases = [
        (Term("exchange", "nearest", (1.5,)), 1.5 * dot.sum()),
        (Term("exchange", "nearest", (1, 2, 3)), np.sum(n[i] * n[j] * [1, 2, 3])),
        (Term("exchange", "nearest", tuple(matrix.ravel())), np.einsum("pa,ab,pb->", n[i], matrix, n[j])),
        (Term("antisymmetric", "nearest", tuple(vector)), np.sum(np.cross(n[i], n[j]) @ vector)),
        (Term("biquadratic", "nearest", (-0.3,)), -0.3 * np.sum(dot**2)),
        (Term("field", "every", tuple(vector)), -np.sum(n @ vector)),
        (Term("field", (4, 1), tuple(vector)), -np.sum(n[[1, 4]] @ vector)),
        (Term("anisotropy", "every", (0.7,), tuple(vector)), 0.7 * np.sum((n @ axis) ** 2)),
    ]
    for term, expected in cases:
        assert term_function(LATTICE, term).value(n) == pytest.approx(expected, rel=1e-12), term.kind
    whole = energy_function(LATTICE, [term for term, _ in cases])
    assert whole.value(n) == pytest.approx(sum(value for _, value in cases), rel=1e-12)


def test_directions_and_two_colouring():
    lattice = lt.honeycomb([3, 3], True)
    n = configuration(lattice.sites)
    terms = [Term("exchange", name, tuple(np.eye(3)[k])) for k, name in enumerate("abc")]
    expected = sum(np.sum(n[i][:, k] * n[j][:, k]) for k, (i, j) in enumerate(lattice.pairs(d).T for d in "abc"))
    assert energy_function(lattice, terms).value(n) == pytest.approx(expected)
    staggered = energy_function(lattice, [Term("field", "even", (0, 0, 1)), Term("field", "odd", (0, 0, -1))])
    assert staggered.value(n) == pytest.approx(-np.sum(n[::2, 2]) + np.sum(n[1::2, 2]))


def test_exchange_of_a_table_keeps_each_pair_as_listed():
    matrices = RNG.normal(size=(2, 3, 3))
    lattice = lt.table([(2, 0), (0, 1)], labels=["u", "v"], exchange=matrices)
    n = configuration(3)
    whole = term_function(lattice, Term("exchange", "all", "table"))
    assert whole.value(n) == pytest.approx(n[2] @ matrices[0] @ n[0] + n[0] @ matrices[1] @ n[1])
    part = term_function(lattice, Term("exchange", "v", "table"))
    assert part.value(n) == pytest.approx(n[0] @ matrices[1] @ n[1])
    with pytest.raises(ValueError, match="exchange table"):
        term_function(lt.chain(3), Term("exchange", "nearest", "table"))


def test_one_canonical_form():
    assert Term("exchange", "nearest", (2.0,)) == Term("exchange", "nearest", (2, 2, 2))
    assert Term("exchange", "nearest", (2, 2, 2)) == Term("exchange", "nearest", (2, 0, -0.0, 0, 2, 0, 0, 0, 2))
    assert Term("anisotropy", "every", (1,), (0, 0, -3)) == Term("anisotropy", "every", (1,), (0, 0, 1e-200))
    assert Term("field", (2, 0), (0, 0, 1)) == Term("field", (0, 2), (-0.0, 0, 1))
    assert unit_axis([1e300, 1e300, 0]) == pytest.approx([0.5**0.5, 0.5**0.5, 0])
    assert Term("biquadratic", "nearest", (0,)).rank == 0 and Term("biquadratic", "nearest", (1,)).rank == 2


def test_misuse_is_told():
    for arguments, word in (
        (("swap", "nearest", (1,)), "allowed are"),
        (("field", "every", (1, 2)), "3 numbers"),
        (("exchange", "nearest", (1, 2)), "1 or 3 or 9"),
        (("exchange", "nearest", (float("nan"),)), "finite"),
        (("anisotropy", "every", (1,), (0, 0, 0)), "zero"),
        (("anisotropy", "every", (1,), (0, 1)), "three"),
    ):
        with pytest.raises(ValueError, match=word):
            Term(*arguments)

"""Expansion into points: order, keys that see content alone, undefined combinations, and studies made in Python."""

import pickle
from dataclasses import replace

import numpy as np
import pytest

from manybody.model import couplings
from manybody.model import lattice as lt
from manybody.workflow.document import DocumentError, Settings, parse_document
from manybody.workflow.points import expand, study_from_functions

TEXT = """
[lattice]
shape = "ring"
sites = [4, 6]
[[term]]
exchange = [1, 1, "1 + d"]
[[term]]
axis = [0, 0, 1]
anisotropy = "k"
[parameters]
d = [0.0, 0.1, 0.2]
k = [0.0, -0.5]
[quantum]
spin = ["1/2", 1]
rule = ["wick", "toeplitz"]
"""


def study(text=TEXT, folder="."):
    return expand(parse_document(text, folder))


def keys(found):
    return [
        (found.classical_key(p.cluster), found.point_key(p), found.point_key(p, "bounds")) for p in found.points
    ]  # fmt: skip


def test_points_in_order():
    found = study()
    assert len(found.points) == 2 * 3 * 2 * 2 * 2 and len(found.clusters) == 12
    first, second = found.points[:2]
    assert first.record() == {
        "lattice": "", "sites": 4, "spin": 0.5, "rule": "wick", "parameters": {"d": 0.0, "k": 0.0},
    }  # fmt: skip
    assert second.rule == "toeplitz" and found.points[-1].label() == "6 sites, d = 0.2, k = -0.5, S = 1, toeplitz"
    assert found.points[-1].log10_dimension == pytest.approx(6 * np.log10(3))


def test_built_models():
    cluster = study().clusters[-1]
    model = cluster.build()
    ring = lt.ring(6)
    expected = couplings.exchange(6, ring.pairs(), [1, 1, 1.2]) + couplings.anisotropy(6, range(6), [0, 0, 1], -0.5)
    assert model.energy.allclose(expected)
    assert model.positions.shape == (6, 3) and model.extent == (6,) and model.periodic == (True,)
    assert model.pairs.tolist() == [[0, 1], [0, 5], [1, 2], [2, 3], [3, 4], [4, 5]]
    assert cluster.build() is model  # kept in this process
    assert cluster.couplings == 12


def test_points_are_small_and_travel():
    for point in study().points[::7]:
        text = pickle.dumps(point)
        again = pickle.loads(text)
        assert len(text) < 1500 and again == point and hash(again) == hash(point)
        assert again.cluster.build().energy == point.cluster.build().energy


def test_undefined_points_are_marked_with_their_reason():
    found = study()
    undefined = [point for point in found.points if point.undefined]
    assert {(p.spin, p.rule, dict(p.cluster.parameters)["k"]) for p in undefined} == {(0.5, "wick", -0.5)}
    assert len(undefined) == 6 and "rank 2" in undefined[0].undefined and "anisotropy" in undefined[0].undefined
    assert len(found.notes) == 1 and "6 of 12" in found.notes[0]
    cancelled = study(TEXT + '[[term]]\nanisotropy = "-k"\n')
    assert not any(point.undefined for point in cancelled.points)
    with pytest.raises(DocumentError, match="no point is defined"):
        study(TEXT.replace('["1/2", 1]', '"1/2"').replace('["wick", "toeplitz"]', '"wick"').replace("[0.0, -0.5]", "1"))


SAME = [
    ("[lattice]", 'title = "other"\n# remark\n[lattice]'),
    ("[quantum]", '[units]\nenergy = "K"\n[quantum]'),
    ('shape = "ring"', 'shape = "chain"\nperiodic = true'),
    ('exchange = [1, 1, "1 + d"]', 'pair = "nearest"\nexchange = [[1.0, 0, 0], [0, "2/2", 0], [0, 0, "d + 1"]]'),
    ("axis = [0, 0, 1]", 'axis = [0, 0, -3]\nsite = "every"'),
    ("[parameters]", "[[term]]\nfield = [0, 0, 0]\n[parameters]"),
    ('spin = ["1/2", 1]', 'spin = [0.5, "1"]\naccuracy = 1e-7\nmemory = "4 GiB"'),
]
OTHER = [
    ('exchange = [1, 1, "1 + d"]', 'exchange = [1, 1, "1.1 + d"]'),
    ('exchange = [1, 1, "1 + d"]', 'pair = "all"\nexchange = [1, 1, "1 + d"]'),
    ('exchange = [1, 1, "1 + d"]', 'biquadratic = "1 + d"'),
    ("axis = [0, 0, 1]", "axis = [0, 1, 0]"),
    ("axis = [0, 0, 1]", "site = [0, 1]"),
    ('shape = "ring"', 'shape = "chain"'),
    ("[quantum]", "[classical]\nseed = 2\n[quantum]"),
]
QUANTUM_ONLY = ["accuracy = 1e-5", "max_bond = 100", 'memory = "1 GiB"', 'observables = "moments"']


@pytest.mark.parametrize(("old", "new"), SAME)
def test_keys_ignore_what_changes_nothing(old, new):
    assert TEXT.count(old) == 1
    assert keys(study(TEXT.replace(old, new))) == keys(study())


@pytest.mark.parametrize(("old", "new"), OTHER)
def test_keys_see_what_changes_results(old, new):
    assert TEXT.count(old) == 1
    plain = TEXT.replace("k = [0.0, -0.5]", "k = [-0.1, -0.5]")
    for before, after in zip(keys(study(plain)), keys(study(plain.replace(old, new))), strict=True):
        assert before[0] != after[0] and before[1] != after[1] and before[2] != after[2]


@pytest.mark.parametrize("line", QUANTUM_ONLY)
def test_quantum_settings_leave_classical_keys(line):
    for before, after in zip(keys(study()), keys(study(TEXT + line)), strict=True):
        assert before[0] == after[0] and before[1] != after[1]


def test_keys_ignore_order_and_names():
    shuffled = """
[quantum]
rule = ["toeplitz", "wick"]
spin = [1, "1/2"]
[parameters]
anisotropy_strength = [-0.5, 0.0]
delta = [0.2, 0.1, 0.0]
[[term]]
anisotropy = "anisotropy_strength"
[[term]]
exchange = [1, 1, "1 + delta"]
[lattice]
sites = [6, 4]
shape = "ring"
"""
    assert sorted(keys(study(shuffled))) == sorted(keys(study()))
    assert len(set(keys(study()))) == len(study().points)
    again = study(shuffled).clusters
    fingerprints = {cluster.key: cluster.build().energy.fingerprint() for cluster in again}
    for cluster in study().clusters:  # bit for bit: order of the terms does not enter by rounding either
        assert cluster.build().energy.fingerprint() == fingerprints[cluster.key]


def test_keys_of_tables(tmp_path):
    text = '[lattice]\nshape = "table"\npairs = "p.csv"\n[[term]]\nexchange = "table"\n'

    def key(content):
        (tmp_path / "p.csv").write_text(content)
        return study(text, tmp_path).clusters[0].key

    base = key("site_a,site_b,exchange\n0,1,1.0\n1,2,2.0\n")
    assert key("# other\nsite_b,site_a,exchange\n2,1,2\n1,0,1\n") == base
    assert key("site_a,site_b,exchange\n0,1,1.0\n1,2,2.5\n") != base
    assert key("site_a,site_b,exchange\n0,1,1.0\n1,3,2.0\n") != base
    model = study(text, tmp_path).clusters[0].build()
    (tmp_path / "p.csv").unlink()
    assert pickle.loads(pickle.dumps(study(text="[lattice]\nshape='chain'\nsites=2\n[[term]]\nexchange=1"))).points
    assert model.energy.value(np.eye(3)[[2, 2, 2, 2]]) == pytest.approx(3.0)


def test_several_lattices():
    found = study(
        '[[lattice]]\nname = "u"\nshape = "chain"\nsites = [4, 5]\n[[lattice]]\nname = "v"\nshape = "ring"\nsites = 4\n'
        "[[term]]\nexchange = 1\n"
    )
    assert [(c.lattice, c.sites) for c in found.clusters] == [("u", 4), ("u", 5), ("v", 4)]
    assert found.clusters[0].label() == "u, 4 sites"


def test_study_from_functions():
    chain = lt.chain(3)
    f = couplings.exchange(3, chain.pairs(), 1.0)
    three = couplings.product(3, [[0, 1, 2]], [{(0, 0, 1): 1.0}] * 3)
    found = study_from_functions({0.0: f, 0.5: f + 0.5 * three}, [1, "3/2"], "toeplitz", parameters=["c"])
    assert [p.record()["parameters"] for p in found.points[::2]] == [{"c": 0.0}, {"c": 0.5}]
    assert [p.spin for p in found.points] == [1, 1.5, 1, 1.5]
    model = found.clusters[1].build()
    assert model.energy == f + 0.5 * three
    assert model.pairs.tolist() == [[0, 1], [0, 2], [1, 2]] and model.positions.shape == (3, 3)
    assert pickle.loads(pickle.dumps(found.points[0])) == found.points[0]
    assert len({found.point_key(point) for point in found.points}) == 4
    sizes = study_from_functions([f, couplings.exchange(4, lt.chain(4).pairs(), 1.0)], positions={3: chain.positions})
    assert [c.sites for c in sizes.clusters] == [3, 4]
    assert np.allclose(sizes.clusters[0].build().positions, chain.positions)
    cubic = couplings.site_function(1, [0], lambda n: np.sum(n**4, axis=-1), 4)
    rank_four = study_from_functions(cubic, [1, 2], ["wick", "toeplitz"])
    assert [bool(p.undefined) for p in rank_four.points] == [True, False, False, False]
    settings = replace(Settings(), seed=5)
    assert study_from_functions(f, settings=settings).classical_key(sizes.clusters[0]) != sizes.classical_key(
        sizes.clusters[0]
    )


@pytest.mark.parametrize(
    ("arguments", "options", "word"),
    [
        (([],), {}, "at least one"),
        ((["f", "f"],), {}, "two energy functions"),
        (({0.1: "f"},), {"parameters": ["gap"]}, "dataset"),
        (({(0.1, 0.2): "f"},), {"parameters": ["c"]}, "2 values"),
        (("f",), {"parameters": ["c"]}, "mapping"),
        (("f", 0.3), {}, "no spin"),
        (("f", [1, 1.0]), {}, "once"),
        (("f", 1, "wik"), {}, "did you mean"),
        (("f",), {"positions": {3: [[0, 0, 0]]}}, "shape"),
        (("cubic", 1, "wick"), {}, "no point is defined"),
    ],
)
def test_misuse_of_study_from_functions(arguments, options, word):
    made = {
        "f": couplings.exchange(3, [[0, 1]], 1.0),
        "cubic": couplings.site_function(1, [0], lambda n: np.sum(n**4, axis=-1), 4),
    }

    def put_in(value):
        if isinstance(value, str):
            return made.get(value, value)
        if isinstance(value, list):
            return [put_in(entry) for entry in value]
        return {key: put_in(entry) for key, entry in value.items()} if isinstance(value, dict) else value

    with pytest.raises(ValueError, match=word):
        study_from_functions(*map(put_in, arguments), **options)

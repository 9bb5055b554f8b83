"""Energies in the literature's normalization: H = sum J S.S instead of a function of unit vectors.

Datasets keep energies of the function on unit vectors. One number per spin and rule turns them into energies of the
Hamiltonian written with spin operators, if all terms scale alike: for pair exchange n_i.n_j that is S^2 (wick,
substitution), S(S+1) (weyl), (S+1)^2 (toeplitz); under substitution alone, S^d for terms that are all of degree d.
"""

import json

import numpy as np

PAIR_FACTORS = {
    "wick": lambda s: s**2,
    "substitution": lambda s: s**2,
    "weyl": lambda s: s * (s + 1),
    "toeplitz": lambda s: (s + 1) ** 2,
}
NORMALIZATIONS = ("energy", "spin")


class NormalizationError(ValueError):
    """The energies cannot be shown in this normalization; the message says why."""


def factor(root, normalization="energy"):
    """What to multiply energies by: a DataArray over (spin, rule), all ones for "energy".

    Raises NormalizationError where no single factor exists, or where the dataset does not say which terms it has.
    """
    import xarray as xr

    rules = root["rule"].values.tolist()
    columns = [factor_at(root, normalization, rule, root["spin"].values) for rule in rules]
    values = np.stack(columns, axis=-1) if columns else np.ones((root.sizes["spin"], 0))
    return xr.DataArray(values, dims=("spin", "rule"), coords={"spin": root["spin"], "rule": root["rule"]})


def factor_at(root, normalization, rule, spins):
    """The factor (n,) for one rule at any spins (n,); raises as `factor`."""
    if normalization not in NORMALIZATIONS:
        raise NormalizationError(f"normalization {normalization!r}: choose {' or '.join(NORMALIZATIONS)}")
    spins = np.asarray(spins, float)
    if normalization == "energy":
        return np.ones_like(spins)
    degree = _degree(root, root["rule"].values.tolist())
    return spins**degree if degree != 2 else PAIR_FACTORS[rule](spins)


def title(normalization) -> str:
    """A phrase for captions."""
    if normalization == "spin":
        return (
            "Energies are those of H = \N{GREEK CAPITAL LETTER SIGMA} J S\N{MIDDLE DOT}S, written with spin operators."
        )
    return "Energies are normalized: those of the energy function on unit vectors, spin operators divided by S."


def _degree(root, rules):
    text = root.attrs.get("term_keys")
    if not text:
        raise NormalizationError("the dataset does not record which terms the energy function has")
    keys = json.loads(text) if isinstance(text, str) else text
    if not keys:
        raise NormalizationError("the energy function has no terms")
    pairs = all(len(key) == 2 and all(list(site) == [1, 1] for site in key) for key in keys)
    if pairs:
        return 2
    degrees = sorted({sum(degree for _, degree in key) for key in keys})
    if len(degrees) > 1:
        listed = " and ".join(str(d) for d in degrees)
        raise NormalizationError(
            f"the energy function has terms of degree {listed} in the unit vectors, which scale differently with S, so "
            "that no single factor turns their sum into the literature's normalization"
        )
    others = [rule for rule in rules if rule != "substitution"]
    if others:
        raise NormalizationError(
            f"under {', '.join(others)} terms with several unit vectors of one site, or more than two sites, do not "
            "all scale alike with S; only under substitution do they"
        )
    return degrees[0]

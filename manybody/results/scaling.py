"""Fits and verdicts of a whole dataset, labelled: the `scaling` group, `trust_spin`, and the spread between rules.

Everything takes a tree from dataset.open_results (or its root Dataset) and returns xarray objects with units. The fits
themselves are in scaling_spin.py, scaling_sites.py and trust.py.
"""

import numpy as np

from manybody.results.derived import energy_scale
from manybody.results.scaling_sites import extrapolate
from manybody.results.scaling_spin import PARITIES, POWERS, SHIFTS, evaluate, fit_spins
from manybody.results.schema import units_text
from manybody.results.trust import STATES, UNKNOWN, trust_all

TOLERANCES = (0.1, 0.05, 0.02, 0.01)
HARMONIC_ERROR = 1e-8
"""One-sided error of e_1, relative: rounding of zero modes."""
LIMITS = {
    "energy": "quantum ground energy per site, limit of many sites",
    "classical": "classical ground energy per site, limit of many sites",
    "gap": "quantum minus classical ground energy per site, limit of many sites",
    "scale": "energy scale |f_min - f_mean| per site, limit of many sites",
}


def scaling_dataset(tree, tolerances=TOLERANCES):
    """All fits of a dataset as one Dataset: in spin, in sites, and trust_spin at the given tolerances.

    What the data do not allow is left out as a variable where nothing is known, else NaN and "unknown".
    """
    import xarray as xr

    root = _root(tree)
    parts = [spin_fits(root), site_limits(tree)]
    parts.append(trust_spin(root, tolerances, fits=parts[0]))
    first = None if parts[1] is None else harmonic_limits(tree)
    parts += [first, trust_spin_limit(tree, tolerances, limits=parts[1], first=first)]
    known = [part for part in parts if part is not None]
    return xr.merge(known, join="exact", compat="equals", combine_attrs="drop_conflicts") if known else xr.Dataset()


def spin_fits(tree):
    """Fits of the gap in 1/S for every cluster, parameter set and rule; None for a study with fewer than two spins.

    spin_coefficient (parity, power): c_k of gap = sum c_k/(S + spin_shift)^k with spin_covariance; gap_fit and
    gap_fit_error at the study's spins; first_coefficient_free: e_1 from the data alone, to be compared with the
    harmonic result.
    """
    import xarray as xr

    root = _root(tree)
    dims = _cluster_dims(root)
    if root.sizes["spin"] < 2 or not np.isfinite(root["gap"]).any():
        return None
    shape = [root.sizes[d] for d in dims] + [root.sizes["rule"]]
    columns = {
        "spin_coefficient": np.full([*shape, 2, POWERS], np.nan),
        "spin_covariance": np.full([*shape, 2, POWERS, POWERS], np.nan),
        "gap_fit": np.full([*shape, root.sizes["spin"]], np.nan),
        "gap_fit_error": np.full([*shape, root.sizes["spin"]], np.nan),
        **{name: np.full(shape, np.nan) for name in ("spin_order", "spin_points", "spin_smallest", "spin_largest")},
        **{name: np.full(shape, np.nan) for name in ("spin_residual", "first_free", "first_free_error")},
        "spin_parity": np.full(shape, -1, np.int8),
        "first_source": np.full(shape, -1, np.int8),
    }
    spins, rules = root["spin"].values, root["rule"].values
    for place, series in _series(root, dims, ("gap", "quantum_energy_error", "harmonic_coefficient")):
        found = fit_spins(
            spins,
            series["gap"],
            series["quantum_energy_error"],
            series["scale"],
            _common(series["harmonic_coefficient"]),
            series["sites"] % 2 == 1,
            rules[place[-1]],
        )
        if found is None:
            continue
        columns["spin_coefficient"][place], columns["spin_covariance"][place] = found.coefficients, found.covariance
        columns["gap_fit"][place], columns["gap_fit_error"][place] = found.predict(spins)
        for name, value in {
            "spin_order": found.order,
            "spin_points": found.points,
            "spin_smallest": found.smallest,
            "spin_largest": found.largest,
            "spin_residual": found.residual,
            "first_free": found.first_free,
            "first_free_error": found.first_free_error,
            "spin_parity": int(found.parity),
            "first_source": 0 if found.first_known else 1,
        }.items():
            columns[name][place] = value
    unit = _unit(root)
    lead = [*dims, "rule"]
    variables = {
        "spin_coefficient": ([*lead, "parity", "power"], "coefficient of 1/(S + spin_shift)^power in the gap", unit),
        "spin_covariance": (
            [*lead, "parity", "power", "other_power"],
            "covariance of the coefficients",
            units_text("energy2", unit),
        ),
        "gap_fit": ([*lead, "spin"], "gap by the fit in 1/(S + shift)", unit),
        "gap_fit_error": ([*lead, "spin"], "standard error of the gap by the fit in 1/(S + shift)", unit),
        "spin_order": (lead, "highest power of 1/S in the fit", "1"),
        "spin_points": (lead, "spins used by the fit in 1/(S + shift)", "1"),
        "spin_smallest": (lead, "smallest spin used by the fit in 1/(S + shift)", "1"),
        "spin_largest": (lead, "largest spin used by the fit in 1/(S + shift)", "1"),
        "spin_residual": (lead, "root-mean-square residual of the fit in 1/(S + shift)", unit),
        "first_free": (lead, "coefficient of 1/S from the data alone", unit),
        "first_free_error": (lead, "standard error of the coefficient of 1/S from the data alone", unit),
    }
    out = {name: (d, columns[name], {"long_name": text, "units": u}) for name, (d, text, u) in variables.items()}
    out["spin_parity"] = (
        lead,
        columns["spin_parity"],
        _flag("fit in 1/(S + shift) of integer and half-integer spin", ("same", "different")),
    )
    out["first_source"] = (
        lead,
        columns["first_source"],
        _flag("coefficient of 1/S in the fit", ("harmonic", "fitted")),
    )
    shifts = np.array([SHIFTS.get(rule, 0.0) for rule in rules])
    out["spin_shift"] = ("rule", shifts, {"long_name": "shift in the expansion in 1/(S + shift)", "units": "1"})
    coords = _coords(root, [*lead, "spin"]) | {
        "parity": ("parity", np.array(PARITIES, dtype=object), {"long_name": "class of spin"}),
        "power": ("power", np.arange(1, POWERS + 1), {"long_name": "power of 1/S", "units": "1"}),
    }
    data = xr.Dataset(out, coords=coords)
    return data.transpose(*[d for d in [*dims, "spin", "rule", "parity", "power", "other_power"] if d in data.dims])


def site_limits(tree):
    """Limits of many sites, per site, for every parameter set, spin and rule; None for fewer than three sizes.

    limit_energy, limit_classical, limit_gap, limit_scale with `_error`, limit_relative_gap; the form with the largest
    weight, that weight, the family of sizes and how many were used.
    """
    import xarray as xr

    root = _root(tree)
    if root.sizes["sites"] < 3 or not np.isfinite(root["gap"]).any():
        return None
    dims = [d for d in root["gap"].dims if d != "sites"]
    shape = [root.sizes[d] for d in dims]
    names = [f"limit_{key}{end}" for key in (*LIMITS, "relative_gap") for end in ("", "_error")]
    columns = {name: np.full(shape, np.nan) for name in [*names, "limit_weight", "limit_sizes", "limit_largest"]}
    text = {name: np.full(shape, "", dtype=object) for name in ("limit_form", "limit_family")}
    for place in np.ndindex(*shape):
        found = limit_at(tree, dict(zip(dims, place)))
        if found is None:
            continue
        for key in LIMITS:
            columns[f"limit_{key}"][place] = found.values[key]
            columns[f"limit_{key}_error"][place] = found.errors[key]
        scale = found.values["scale"]
        if scale > 2 * found.errors["scale"]:
            ratio = found.values["gap"] / scale
            columns["limit_relative_gap"][place] = ratio
            columns["limit_relative_gap_error"][place] = (
                np.hypot(found.errors["gap"], ratio * found.errors["scale"]) / scale
            )
        columns["limit_weight"][place] = found.weight
        columns["limit_sizes"][place], columns["limit_largest"][place] = len(found.sizes), found.sizes[-1]
        text["limit_form"][place], text["limit_family"][place] = found.form, found.family
    unit = _unit(root)
    titles = LIMITS | {"relative_gap": "quantum minus classical ground energy, relative, limit of many sites"}
    out = {}
    for key, title in titles.items():
        units = "1" if key == "relative_gap" else unit
        out[f"limit_{key}"] = (dims, columns[f"limit_{key}"], {"long_name": title, "units": units})
        attrs = {"long_name": f"standard error: {title}", "units": units, "comment": "includes the choice of the form"}
        out[f"limit_{key}_error"] = (dims, columns[f"limit_{key}_error"], attrs)
    out["limit_weight"] = (dims, columns["limit_weight"], {"long_name": "weight of the leading form", "units": "1"})
    out["limit_sizes"] = (dims, columns["limit_sizes"], {"long_name": "sizes used for the limit", "units": "1"})
    out["limit_largest"] = (
        dims,
        columns["limit_largest"],
        {"long_name": "largest size used for the limit", "units": "1"},
    )
    out["limit_form"] = (dims, text["limit_form"], {"long_name": "form in N with the largest weight"})
    out["limit_family"] = (dims, text["limit_family"], {"long_name": "family of sizes that was extrapolated"})
    return xr.Dataset(out, coords=_coords(root, dims))


def limit_at(tree, index):
    """The Limit (scaling_sites.py) of one series over sites; index: positions of all other dimensions. None if too
    few."""
    root = _root(tree)
    chosen = root.isel(index)
    usable = chosen["quantum_energy_error"].where(_usable(chosen))
    sites = root["sites"].values
    boundary, dimension, families = _geometry(tree, index.get("lattice"))
    return extrapolate(
        sites,
        chosen["quantum_energy"].values,
        usable.values,
        {
            "classical": chosen["classical_energy"].values,
            "gap": chosen["gap"].values,
            "scale": abs(chosen["classical_energy"] - chosen["classical_mean"]).values,
        },
        boundary,
        dimension,
        families,
    )


def trust_spin(tree, tolerance=0.05, fits=None):
    """The smallest spin from which on the classical energy is within `tolerance` of the quantum one, relative.

    tolerance: a number or several (then the dimension `within`). Returns a Dataset over clusters, parameters and rule:
    trust_spin, trust_spin_low, trust_spin_high, trust_state (flag, see trust.STATES) and trust_spin_spread (largest
    minus smallest over the rules of the study). None where no spin fit is possible.
    """
    root = _root(tree)
    fits = spin_fits(root) if fits is None else fits
    if fits is None:
        return None
    spins = root["spin"].values
    dims = _cluster_dims(root)
    verdicts = {}
    # plain arrays: picking labelled ones apart at every parameter value would cost more than the judgement
    coefficients = fits["spin_coefficient"].transpose(*dims, "rule", ...).values
    covariance = fits["spin_covariance"].transpose(*dims, "rule", ...).values
    shifts = fits["spin_shift"].values
    for place, series in _series(root, dims, ("gap", "quantum_energy_error")):
        verdicts[place] = _judge(
            spins,
            series["gap"],
            series["quantum_energy_error"],
            series["scale"],
            coefficients[place],
            covariance[place],
            float(shifts[place[-1]]),
            tolerance,
        )
    return _trust_dataset(root, [*dims, "rule"], verdicts, tolerance, "")


def harmonic_limits(tree):
    """The first quantum correction e_1 per site in the limit of many sites: limit_first, with limit_first_error.

    Extrapolated like the energies (scaling_sites.py) for every parameter set and rule; missing where fewer than three
    sizes have one e_1 that all spins share. None where nothing is known.
    """
    import xarray as xr

    root = _root(tree)
    if root.sizes["sites"] < 3 or not np.isfinite(root["harmonic_coefficient"]).any():
        return None
    dims = [*(d for d in _cluster_dims(root) if d != "sites"), "rule"]
    shape = [root.sizes[d] for d in dims]
    value, error = np.full(shape, np.nan), np.full(shape, np.nan)
    first = root["harmonic_coefficient"].transpose(*dims, "sites", "spin").values
    for place in np.ndindex(*shape):
        common = [_common(one) for one in first[place]]
        series = np.array([np.nan if one is None else one for one in common])
        if np.isfinite(series).sum() < 3:
            continue
        noise = np.full(len(series), HARMONIC_ERROR * np.nanmax(np.abs(series)))
        found = extrapolate(
            root["sites"].values, series, noise, {}, *_geometry(tree, dict(zip(dims, place)).get("lattice"))
        )
        value[place], error[place] = found.values["energy"], found.errors["energy"]
    title = "first quantum correction e_1 per site, limit of many sites"
    attrs = {
        "long_name": f"standard error: {title}",
        "units": _unit(root),
        "comment": "includes the choice of the form",
    }
    out = {
        "limit_first": (dims, value, {"long_name": title, "units": _unit(root)}),
        "limit_first_error": (dims, error, attrs),
    }
    return xr.Dataset(out, coords=_coords(root, dims)) if np.isfinite(value).any() else None


def trust_spin_limit(tree, tolerance=0.05, limits=None, first=None):
    """trust_spin in the limit of many sites, from the extrapolated gaps per site; None where those do not suffice.

    The coefficient of 1/S is the extrapolated harmonic one, which counts with its standard error, where there is one;
    else it is fitted. limits, first: results of site_limits and harmonic_limits, if they are at hand.
    """
    root = _root(tree)
    limits = site_limits(tree) if limits is None else limits
    if limits is None or root.sizes["spin"] < 2:
        return None
    first = harmonic_limits(tree) if first is None else first
    spins = root["spin"].values
    dims = [d for d in _cluster_dims(root) if d != "sites"]
    gaps, deviations, scales = (
        limits[name].transpose(*dims, "rule", "spin").values for name in ("limit_gap", "limit_gap_error", "limit_scale")
    )
    verdicts = {}
    for place in np.ndindex(*[root.sizes[d] for d in [*dims, "rule"]]):
        # the extrapolated gap has a two-sided standard error: as an interval [gap - error, gap] of 95 % it is
        # the value shifted up by two of them, four wide
        deviation = deviations[place]
        gap = gaps[place] + 2 * deviation
        scale = (
            float(np.mean(scales[place][np.isfinite(scales[place])])) if np.isfinite(scales[place]).any() else np.nan
        )
        known = [None, 0.0]
        if first is not None:
            known = [
                float(first[n].transpose(*dims, "rule").values[place]) for n in ("limit_first", "limit_first_error")
            ]
            known = known if np.isfinite(known).all() else [None, 0.0]
        rule = root["rule"].values[place[-1]]
        found = fit_spins(spins, gap, 4 * deviation, scale, known[0], rule=rule, first_error=known[1])
        nothing = np.full((2, POWERS), np.nan), None, 0.0
        parts = (found.coefficients, found.covariance, found.shift) if found else nothing
        verdicts[place] = _judge(spins, gap, 4 * deviation, scale, *parts, tolerance)
    return _trust_dataset(root, [*dims, "rule"], verdicts, tolerance, "limit_")


def rule_spread(tree):
    """Largest minus smallest relative gap between the rules, by cluster and spin: what the choice of the rule is
    worth."""
    root = _root(tree)
    values = root["relative_gap"].where(_usable(root))
    if root.sizes["rule"] < 2:
        spread = values.sum("rule") * np.nan
    else:
        spread = (values.max("rule") - values.min("rule")).where(values.notnull().sum("rule") > 1)
    spread.attrs = {"long_name": "spread of the relative gap between quantization rules", "units": "1"}
    return spread.rename("rule_spread")


def _judge(spins, gap, error, scale, coefficients, covariance, shift, tolerance):
    usable = scale > 0 and np.isfinite(coefficients).any()

    def predict(at):
        value, deviation = evaluate(coefficients, covariance, at, shift)
        return value / scale, deviation / scale

    tolerances = np.atleast_1d(tolerance)
    return trust_all(spins, gap / scale, error / scale, predict, tolerances) if usable else [UNKNOWN] * len(tolerances)


def _trust_dataset(root, lead, verdicts, tolerance, prefix):
    import xarray as xr

    several = np.ndim(tolerance) > 0
    tolerances = np.atleast_1d(np.asarray(tolerance, float))
    dims = [*lead, "within"]
    shape = [*(root.sizes[d] for d in lead), len(tolerances)]
    columns = {name: np.full(shape, np.nan) for name in ("trust_spin", "trust_spin_low", "trust_spin_high")}
    state = np.full(shape, -1, np.int8)
    for place, results in verdicts.items():
        for k, result in enumerate(results):
            columns["trust_spin"][(*place, k)] = result.spin
            columns["trust_spin_low"][(*place, k)] = result.low
            columns["trust_spin_high"][(*place, k)] = result.high
            state[(*place, k)] = STATES.index(result.state) if result.state in STATES else -1
    where = ", limit of many sites" if prefix else ""
    titles = {
        "trust_spin": f"smallest spin from which on the classical energy is within the tolerance{where}",
        "trust_spin_low": f"lower end of trust_spin{where}",
        "trust_spin_high": f"upper end of trust_spin{where}",
    }
    out = {prefix + n: (dims, columns[n], {"long_name": titles[n], "units": "1"}) for n in columns}
    out[f"{prefix}trust_state"] = (dims, state, _flag(f"how trust_spin is known{where}", STATES))
    coords = _coords(root, lead)
    coords["within"] = ("within", tolerances, {"long_name": "tolerance on |relative_gap|", "units": "1"})
    data = xr.Dataset(out, coords=coords)
    value = data[f"{prefix}trust_spin"]
    spread = (value.max("rule") - value.min("rule")).where(value.notnull().sum("rule") > 1)
    spread.attrs = {"long_name": f"spread of trust_spin between quantization rules{where}", "units": "1"}
    data[f"{prefix}trust_spin_spread"] = spread
    return data if several else data.isel(within=0)


def _root(tree):
    return tree.dataset if hasattr(tree, "dataset") else tree


def _unit(root):
    return root["gap"].attrs.get("units", "1")


def _cluster_dims(root):
    return list(root["classical_energy"].dims)


def _usable(root):
    """Points with an energy and an error to fit: converged ones, and unconverged ones with the error they state; none
    that violates the ladder, since its error is wrong."""
    usable = np.isfinite(root["quantum_energy"]) & np.isfinite(root["quantum_energy_error"]) & (root["status"] <= 1)
    return usable & (root["ladder"] != 1) if "ladder" in root else usable


def _coords(root, dims):
    return {d: root[d] for d in dims if d in root.coords}


def _flag(title, flags):
    return {"long_name": title, "flag_values": [-1, *range(len(flags))], "flag_meanings": " ".join(("unknown", *flags))}


def _series(root, dims, names):
    """(place, {name: array over spin, "scale", "sites"}) for every cluster and rule."""
    usable = _usable(root)
    arrays = {n: root[n].where(usable).transpose(*dims, "rule", "spin").values for n in names}
    scale = energy_scale(root).transpose(*dims).values
    sites = np.broadcast_to(root["sites"].values.reshape([-1 if d == "sites" else 1 for d in dims]), scale.shape)
    for place in np.ndindex(*arrays[names[0]].shape[:-1]):
        cluster = place[:-1]
        yield place, {n: a[place] for n, a in arrays.items()} | {"scale": scale[cluster], "sites": sites[cluster]}


def _common(first):
    """The one e_1 of all spins; None where there is none or where spins disagree (another minimum was selected)."""
    known = first[np.isfinite(first)]
    if not len(known) or np.ptp(known) > 1e-6 * max(np.max(np.abs(known)), 1e-300):
        return None
    return float(np.median(known))


def _geometry(tree, lattice):
    """Boundary ("open", "periodic", None), dimension (or None) and commensurate families of sizes, as far as
    recorded."""
    root = _root(tree)
    sites = root["sites"].values
    families = {f"sites = {r} modulo {q}": sites % q == r for q in (2, 3, 4) for r in range(q)}
    group = tree["configuration"] if hasattr(tree, "children") and "configuration" in tree.children else None
    if group is None or "extent" not in group.data_vars or "periodic" not in group.data_vars:
        return None, None, families
    extent, periodic = group["extent"].values, group["periodic"].values
    if lattice is not None:
        extent, periodic = extent[lattice], periodic[lattice]
    real = extent > 1
    if not real.any():
        return None, None, families
    edges = set(np.unique(periodic[real]).tolist())
    boundary = {(0,): "open", (1,): "periodic"}.get(tuple(sorted(edges)))
    growing = [bool(np.unique(e[e > 0]).size > 1) for e in extent.T]
    dimension = int(sum(growing)) or None
    for q in (2, 3):
        for r in range(q):
            mask = np.all((extent % q == r) | (extent < 0), axis=-1) & (extent > 0).any(axis=-1)
            families[f"extents = {r} modulo {q}"] = mask
    return boundary, dimension, families

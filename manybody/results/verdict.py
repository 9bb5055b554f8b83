"""The answer of a study in two sentences, and what speaks against believing it.

What is not known is said to be unknown.
"""

import numpy as np

from manybody.results import wording
from manybody.results.dataset import flag_words
from manybody.results.scaling import rule_spread, trust_spin, trust_spin_limit
from manybody.results.scaling_sites import determined
from manybody.results.trust import STATES

JUDGE = (
    "These numbers compare two descriptions of the same model. Whether the model, the rule and the tolerance suit your "
    "system is for you to judge."
)


def answer(view, tolerance=0.05) -> tuple[str, str]:
    """(how large the gap is, from which spin on the classical description will do) for a figure_view.View."""
    return _size_of_gap(view), _trusted(view, tolerance)


def cautions(view, tolerance=0.05) -> list[str]:
    """Every reason for doubt that the data give, most serious first; the last one is always for the reader to judge."""
    root = view.root
    found = []
    status = flag_words(root["status"])
    planned = int((status != "absent").sum())
    for word, text in {
        "failed": "failed, so that their energies are missing",
        "not_converged": "did not converge: their quantum energies are upper bounds with the stated, large errors",
        "refused": "were refused because they need more memory than was allowed",
        "waiting": "are not computed yet",
        "undefined": "are undefined: the rule has no operator for a term at that spin",
    }.items():
        hits = int((status == word).sum())
        if hits:
            found.append(f"{hits} of {planned} points {text}.{_why(root, status == word)}")
    broken = int((root["ladder"].values == 1).sum())
    if broken:
        found.append(
            f"The energy ladder is violated at {wording.count(broken, 'point')}: something did not converge there, and "
            f"the gap must not be used ({_list(root, root['ladder'].values == 1)})."
        )
    found += _unproved(root)
    found += _remarks(root)
    found += _extrapolated(view, tolerance)
    found += _harmonic(view)
    spread = rule_spread(root)
    if np.isfinite(spread).any():
        worst = float(spread.max())
        where = spread.where(spread == worst, drop=True)
        found.append(
            f"The rules of this study differ by up to {wording.percent(worst)} of the energy scale (at S = "
            f"{wording.spin(float(where['spin'].values[0]))}): the rule is part of the model, not a detail of the "
            "method."
        )
    return [*found, JUDGE]


def _size_of_gap(view):
    usable = view.usable()
    if not bool(usable.any()):
        return "How large the gap is, is unknown: no point has a quantum energy yet."
    rule = next(r for r in view.rules if bool(usable.sel(rule=r).any()))
    all_usable = np.isfinite(view.root["gap"]) & (view.root["status"] <= 1)
    counts = usable.sel(rule=rule).sum("spin").values
    size = int(view.sites[np.flatnonzero(counts > 0)[-1]])
    spins = view.spins[usable.sel(rule=rule, sites=size).values]
    unit = "" if view.unit in ("", "1") else f" {view.unit}"
    ends = [float(s) for s in dict.fromkeys([spins[0], spins[-1]])]
    swept = _swept(view)
    parts, parts_relative, signs = [], [], []
    for spin in ends:
        place = {"rule": rule, "sites": size, "spin": spin}
        factor = float(view.factor.sel(rule=rule, spin=spin))
        values = (view.root["gap"].where(all_usable).sel(place) * factor / size).values
        relative = view.root["relative_gap"].where(all_usable).sel(place).values
        error = float((view.energy("quantum_energy_error") / size).sel(place))
        signs += np.sign(np.where(np.abs(relative) < 1e-9, 0, values))[np.isfinite(values)].tolist()
        parts.append(f"{_range(np.abs(values), error)}{unit} at S = {wording.spin(spin)}")
        parts_relative.append(_range_percent(np.abs(relative)))
    if not any(signs):
        return f"The quantum ground energy equals the classical one within rounding ({size} sites, rule {rule})."
    verb = "lies below" if max(signs) <= 0 else "lies above" if min(signs) >= 0 else "differs from"
    by = "in size by" if verb == "differs from" else "by"
    over = f", over all {wording.several(swept)}" if swept else ""
    where = f"{size} sites, rule {rule}{over}"
    text = (
        f"The quantum ground energy {verb} the classical one {by} {wording.several(parts)} "
        f"per site ({where}), which is {wording.several(parts_relative)} of the energy scale"
    )
    return text + _limit_of_gap(view, rule, ends[0], unit) + "."


def _swept(view):
    return [d if d != "lattice" else "lattices" for d in view.place if view.root.sizes[d] > 1]


def _limit_of_gap(view, rule, spin, unit):
    if "limit_gap" not in view.scaling:
        return ""
    one = view.scaling.isel(view.place).sel(rule=rule, spin=spin)
    value, error = float(one["limit_gap"]), float(one["limit_gap_error"])
    if not np.isfinite(value):
        return ""
    if not determined(value, error, float(one["limit_scale"])):
        return "; these sizes do not determine its limit for many sites"
    factor = float(view.factor.sel(rule=rule, spin=spin))
    text = wording.measured(abs(value) * factor, error * factor)
    return (
        f"; with many sites it tends to {text}{unit} at S = {wording.spin(spin)}{view.note() and ', ' + view.where()}"
    )


def _trusted(view, tolerance):
    within = f"within {wording.percent(tolerance)} of the energy scale |f_min \N{MINUS SIGN} f_mean|"
    verdict = trust_spin(view.root, tolerance)
    if verdict is None or not np.isfinite(verdict["trust_spin"]).any():
        needs = (
            "it needs energies at two spins at least" if verdict is None else "the data do not allow a fit in the spin"
        )
        return f"From which spin on the classical energy is {within} is unknown: {needs}."
    parts = []
    for rule in view.rules:
        one = verdict.sel(rule=rule)
        known = np.isfinite(one["trust_spin"])
        if not bool(known.any()):
            parts.append(f"unknown under {rule}")
            continue
        others = [d for d in known.dims if d != "sites"]
        size = int(view.sites[np.flatnonzero(known.any(others).values)[-1]])
        one = one.sel(sites=size)
        spins = one["trust_spin"].values
        parts.append(f"{_spin_range(spins)} under {rule} ({size} sites{_how(view, one)})")
    spread = float(verdict["trust_spin_spread"].max()) if len(view.rules) > 1 else np.nan
    tail = f"; the rules differ by up to {wording.spin(spread)} in spin" if np.isfinite(spread) and spread > 0 else ""
    many = _trusted_limit(view, tolerance)
    swept = _swept(view)
    over = f", over all {wording.several(swept)}" if swept else ""
    return f"The classical energy stays {within} from this spin on{over}: {wording.several(parts)}{tail}{many}."


def _trusted_limit(view, tolerance):
    """How the size changes it: the same in the limit of many sites, where that is known."""
    if "limit_gap" not in view.scaling:
        return ""
    first = view.scaling if "limit_first" in view.scaling else None
    verdict = trust_spin_limit(view.tree, tolerance, limits=view.scaling, first=first)
    if verdict is None:
        return ""
    verdict = verdict.rename({n: n.removeprefix("limit_") for n in verdict.data_vars})
    parts = []
    for rule in view.rules:
        one = verdict.sel(rule=rule)
        if np.isfinite(one["trust_spin"]).any():
            vague = one["trust_spin_high"] > 2 * one["trust_spin_low"]
            between = _between(one)
            parts.append(
                f"it is not determined by these sizes under {rule}"
                if bool(vague.any())
                else f"it is {_spin_range(one['trust_spin'].values)}{between and f' ({between})'} under {rule}"
            )
    return f"; with many sites, extrapolated, {wording.several(parts)}" if parts else ""


def _how(view, one):
    state = {STATES[k] for k in one["trust_state"].values.ravel().tolist() if k >= 0}
    largest = wording.spin(float(view.spins[-1]))
    text = {
        "extrapolated": f"extrapolated beyond S = {largest}, the largest spin computed",
        "at_most": "at most: smaller spins were not computed",
        "interpolated": "between computed spins",
        "measured": "measured",
    }
    words = [text[name] for name in STATES if name in state]
    between = _between(one)
    return f"; {' or '.join(words)}{between and f'; {between}'}"


def _between(one):
    """What the errors allow, where that is more than the verdicts themselves span."""
    low, high = float(one["trust_spin_low"].min()), float(one["trust_spin_high"].max())
    spins = one["trust_spin"].values
    wide = low < np.nanmin(spins) or high > np.nanmax(spins)
    return f"possibly {wording.spin(low)} to {wording.spin(high)}" if wide else ""


def _unproved(root):
    words = flag_words(root["classical_certified"])
    have = np.isfinite(root["classical_energy"].values)
    missing = have & (words != "yes")
    if not missing.any():
        return []
    text = f"{int(missing.sum())} of {int(have.sum())} classical minima are not proved global"
    distance = root["classical_energy"] - root["classical_energy_bound"]
    rigorous = flag_words(root["classical_bound_method"]) != "clusters_searched"
    share = (distance / abs(root["classical_energy"])).values[missing & rigorous]
    share = share[np.isfinite(share)]
    if len(share):
        text += f"; the rigorous bound is up to {wording.percent(float(share.max()))} of the energy lower"
    return [text + ". A lower minimum would make the gap larger by the difference."]


def _remarks(root):
    """What the classical branch itself says: not converged, fewer starts than asked for, a bound that is no proof."""
    said = root["classical_message"].values
    remarked = np.array([bool(m) for m in said.ravel()]).reshape(said.shape)
    if not remarked.any():
        return []
    have = int(np.isfinite(root["classical_energy"].values).sum())
    return [
        f"{int(remarked.sum())} of {have} classical minima need a remark.{_why(root, remarked, 'classical_message')}"
    ]


def _extrapolated(view, tolerance):
    found = []
    verdict = trust_spin(view.root, tolerance)
    if verdict is not None and (verdict["trust_state"].values == STATES.index("extrapolated")).any():
        found.append(
            "The spin from which on the classical energy is good enough lies beyond the largest spin computed, "
            f"S = {wording.spin(float(view.spins[-1]))}: it rests on a fit. Compute larger spins to confirm it."
        )
    if "limit_gap" in view.scaling and np.isfinite(view.scaling["limit_gap"]).any():
        largest = int(view.scaling["limit_largest"].max())
        found.append(
            f"Limits of many sites are extrapolated from at most {largest} sites; their errors include the choice of "
            "the form, not a change of behaviour at larger sizes."
        )
    return found


def _harmonic(view):
    fits = view.scaling
    if "first_free" not in fits:
        return []
    first = view.root["harmonic_coefficient"].median("spin")
    off = abs(fits["first_free"] - first) > 4 * fits["first_free_error"] + 1e-6 * abs(first)
    hits = int((off & np.isfinite(fits["first_free"])).sum())
    if not hits:
        return []
    series = "one fit" if hits == 1 else f"{hits} fits"
    return [
        f"In {series} the data alone do not agree with the first quantum correction e_1 within its error: another "
        "classical minimum, tunnelling between minima or a slow series in 1/S may be the cause."
    ]


def _why(root, mask, name="message"):
    """The most frequent message among the points, if there is one."""
    messages = [m for m in np.broadcast_to(root[name].values, mask.shape)[mask].tolist() if m]
    if not messages:
        return ""
    common = max(set(messages), key=messages.count)
    more = "" if len(set(messages)) == 1 else f" (and {len(set(messages)) - 1} other messages)"
    return f" The program said: {common.rstrip('.')}{more}."


def _list(root, mask, most=4):
    """The first few points of a mask in words."""
    dims = root["status"].dims
    names = []
    for index in np.argwhere(mask)[:most]:
        values = {d: root[d].values[i] for d, i in zip(dims, index)}
        spin = wording.spin(float(values.pop("spin")))
        rest = ", ".join(f"{k} {v:g}" if isinstance(v, float) else f"{k} {v}" for k, v in values.items())
        names.append(f"{rest}, S = {spin}")
    total = int(mask.sum())
    return "; ".join(names) + ("" if total <= most else f"; and {total - most} more")


def _range(values, error):
    values = values[np.isfinite(values)]
    if values.size == 0:
        return "an unknown amount"
    if np.ptp(values) <= 1e-9 * values.max():
        exact = error <= 1e-5 * values.max()
        return wording.number(values.max()) if exact else wording.measured(float(values.max()), error)
    return f"{wording.number(values.min(), 3)} to {wording.number(values.max(), 3)}"


def _range_percent(values):
    values = values[np.isfinite(values)]
    if values.size == 0:
        return "an unknown part"
    if np.ptp(values) <= 5e-3 * values.max():
        return wording.percent(float(values.max()))
    return f"{wording.percent(float(values.min()))} to {wording.percent(float(values.max()))}"


def _spin_range(values):
    values = values[np.isfinite(values)]
    low, high = float(np.min(values)), float(np.max(values))
    return f"S = {wording.spin(low)}" if low == high else f"S = {wording.spin(low)} to {wording.spin(high)}"

"""Figures of the gap: against spin with e_1/S and the fit, and per site against size with the extrapolation."""

import numpy as np

from manybody.results.figure_style import (
    COLOURS,
    INK,
    MARKERS,
    below,
    even_choice,
    log_ticks,
    new_figure,
    spin_axis,
    spin_text,
    unit_text,
)
from manybody.results.figure_view import NotDrawn
from manybody.results.normalization import factor_at
from manybody.results.published import matching
from manybody.results.scaling import limit_at
from manybody.results.scaling_sites import determined
from manybody.results.scaling_spin import evaluate_class
from manybody.results.wording import several


def gap_against_spin(view):
    """|gap| per site against spin on logarithmic axes, with the e_1 line and the fit, one panel per rule."""
    usable = view.usable()
    gaps = view.energy("gap").where(usable)
    drawable = np.isfinite(gaps) & (abs(view.point["relative_gap"]) > 1e-9)
    if not bool(usable.any()):
        raise NotDrawn("no point has a quantum energy yet")
    if len(view.spins) < 2:
        raise NotDrawn("the study has one spin only")
    if not bool(drawable.any()):
        raise NotDrawn("every gap is zero within rounding, which a logarithmic axis cannot show")
    rules = [rule for rule in view.rules if bool(drawable.sel(rule=rule).any())]
    sizes = even_choice([n for n in view.sites if bool(drawable.sel(sites=n).any())], 4)
    figure, axes = new_figure(len(rules))
    handles = {}
    grid = np.geomspace(view.spins.min(), view.spins.max() * 1.6, 60)
    for axis, rule in zip(axes[0], rules):
        for k, size in enumerate(sizes):
            place = {"sites": size, "rule": rule}
            mask = drawable.sel(place).values
            if not mask.any():
                continue
            colour = COLOURS[k]
            value = gaps.sel(place).values[mask] / size
            error = view.energy("quantum_energy_error").sel(place).values[mask] / size
            _size_bars(axis, view.spins[mask], value, error, colour, MARKERS[k])
            label = f"{size} sites"
            handles[label] = axis.plot([], [], color=colour, marker=MARKERS[k], ls="")[0]
            first = view.point["harmonic_coefficient"].sel(place).values
            first = first[np.isfinite(first)]
            scale = factor_at(view.root, view.normalization, rule, grid)
            if len(first) and abs(first[0]) > 0:
                axis.plot(grid, abs(first[0]) / grid * scale / size, color=colour, lw=0.9, ls=(0, (1.5, 1.5)))
                handles["first correction alone, |e\N{SUBSCRIPT ONE}|/S"] = axis.plot(
                    [], [], color=INK, lw=0.9, ls=(0, (1.5, 1.5))
                )[0]
            for name, dash, middle, deviation in _spin_curves(view, place, grid):
                middle, deviation = abs(middle) * scale / size, deviation * scale / size
                axis.plot(grid, middle, color=colour, lw=1.2, ls=dash)
                low = np.maximum(middle - 2 * deviation, middle * 0.05)
                axis.fill_between(grid, low, middle + 2 * deviation, color=colour, alpha=0.18, lw=0)
                handles[f"fit{name}, two standard errors"] = axis.plot([], [], color=INK, lw=1.2, ls=dash)[0]
        axis.set_xscale("log")
        axis.set_yscale("log")
        log_ticks(axis.yaxis)
        signs = np.sign(gaps.sel(rule=rule).values[drawable.sel(rule=rule).values])
        sign = "gap > 0" if (signs > 0).all() else "gap < 0" if (signs < 0).all() else "gap of both signs"
        axis.set_title(f"rule: {rule} ({sign})", loc="left")
        spin_axis(axis.xaxis, view.spins)
    axes[0, 0].set_ylabel(f"|quantum \N{MINUS SIGN} classical|\nenergy per site ({unit_text(view.unit)})")
    names = sorted(handles, key=lambda name: not name.endswith("sites"))
    below(axes[0, 0], {name: handles[name] for name in names})
    dropped = int((usable & ~drawable).sum())
    zero = f" {dropped} points with zero gap are not on this logarithmic axis." if dropped else ""
    fitted = (
        " The fit is drawn beyond the largest spin as an extrapolation." if "spin_coefficient" in view.scaling else ""
    )
    fewer = " Not every size is drawn." if len(sizes) < len(view.sites) else ""
    caption = f"Size of the gap per site against spin.{fewer}{fitted}{zero}{view.note()}"
    return figure, caption


def gap_against_sites(view):
    """Gap per site against 1/N with the extrapolation to many sites, one panel per rule."""
    usable = view.usable()
    if len(view.sites) < 2:
        raise NotDrawn("the study has one size only")
    gaps = (view.energy("gap") / view.point["sites"]).where(usable)
    if not bool(np.isfinite(gaps).any()):
        raise NotDrawn("no point has a quantum energy yet")
    rules = [rule for rule in view.rules if bool(np.isfinite(gaps.sel(rule=rule)).any())]
    spins = even_choice([s for s in view.spins if bool(np.isfinite(gaps.sel(spin=s)).any())])
    figure, axes = new_figure(len(rules))
    published = matching(view.root)
    handles, cited, vague, extrapolated, shown = {}, [], [], False, [0.0]
    for axis, rule in zip(axes[0], rules):
        for k, spin in enumerate(spins):
            colour, marker = COLOURS[k % len(COLOURS)], MARKERS[k]
            place = {"spin": spin, "rule": rule}
            value = gaps.sel(place).values
            good = np.isfinite(value)
            factor = float(view.factor.sel(place))
            error = (view.energy("quantum_energy_error").sel(place) / view.point["sites"]).values
            _bars(axis, 1 / view.sites[good], value[good], error[good], colour, marker)
            shown += [*value[good], *(value[good] - error[good])]
            handles[f"S = {spin_text(spin)}"] = axis.plot([], [], color=colour, marker=marker, ls="")[0]
            index = dict(view.place) | {
                "spin": int(np.flatnonzero(view.spins == spin)[0]),
                "rule": view.rules.index(rule),
            }
            limit = limit_at(view.tree, index)
            if limit is not None and not determined(limit.values["gap"], limit.errors["gap"], limit.values["scale"]):
                vague.append(f"S = {spin_text(spin)} ({rule})")
            elif limit is not None:
                extrapolated = True
                inverse = np.linspace(1 / max(limit.sizes), 1 / min(limit.sizes), 80)
                axis.plot(inverse, limit.curve.at("gap", 1 / inverse) * factor, color=colour, lw=1)
                end = limit.values["gap"] * factor
                shown.append(end)
                last = limit.curve.at("gap", np.array([max(limit.sizes)]))[0] * factor
                axis.plot([0, inverse[0]], [end, last], color=colour, lw=1, ls=(0, (1.5, 1.5)))
                axis.errorbar([0], [end], yerr=2 * limit.errors["gap"] * factor, fmt=marker, mfc="white", color=colour)
                handles["limit, two standard errors"] = axis.plot([], [], "o", mfc="white", color=INK)[0]
                for row in published:
                    # a published energy can only be compared where this study knows the classical one
                    known = limit.errors["classical"] < 0.1 * abs(row.value - limit.values["classical"])
                    if (row.spin, row.rule) == (spin, rule) and known:
                        at = (row.value - limit.values["classical"]) * factor
                        axis.plot([0], [at], marker="*", color="none", mec=colour, ms=12, zorder=5)
                        handles["published limit"] = axis.plot([], [], "*", mfc="none", mec=INK, ms=11, ls="")[0]
                        cited.append(f"S = {spin_text(spin)}: {row.citation}")
        axis.axhline(0, color=INK, lw=0.8)
        axis.set_title(f"rule: {rule}", loc="left")
        axis.set_xlabel("1 / number of sites")
        axis.set_xlim(-0.04 / view.sites.min(), 1.06 / view.sites.min())
    spread = max(shown) - min(shown)
    axes[0, 0].set_ylim(min(shown) - 0.25 * spread, max(shown) + 0.25 * spread)
    axes[0, 0].set_ylabel(f"quantum \N{MINUS SIGN} classical\nenergy per site ({unit_text(view.unit)})")
    below(axes[0, 0], dict(sorted(handles.items(), key=lambda item: not item[0].startswith("S ="))))
    what = (
        " Solid: leading form, over the sizes that were extrapolated; open symbols at zero: limit of many "
        "sites, whose error may leave the frame."
        if extrapolated
        else ""
        if vague
        else " No limit of many sites: that needs three sizes of one family."
    )
    if vague:
        what += f" These sizes do not determine the limit of many sites for {several(vague)}."
    source = (
        f" Stars: published energies minus this study's classical limit ({'; '.join(dict.fromkeys(cited))})."
        if cited
        else ""
    )
    caption = f"Gap per site against the inverse number of sites.{what}{source}{view.note()}"
    return figure, caption


def _bars(axis, x, value, error, colour, marker):
    """Values with their one-sided error, which can only lower the energy."""
    error = np.nan_to_num(error)
    axis.errorbar(x, value, yerr=[error, 0 * error], fmt=marker, color=colour)


def _size_bars(axis, x, value, error, colour, marker):
    """The same for |value| on a logarithmic axis: the lower energy may be the larger size."""
    size, far = np.abs(value), np.abs(value - np.nan_to_num(error))
    low, high = np.maximum(np.minimum(size, far), 1e-3 * size), np.maximum(size, far)
    axis.errorbar(x, size, yerr=[size - low, high - size], fmt=marker, color=colour)


def _spin_curves(view, place, grid):
    """(name, dash, gap, standard error) of the recorded fit on a grid of spins: two if the classes of spin differ."""
    fits = view.scaling
    if "spin_coefficient" not in fits:
        return
    one = fits.isel(view.place).sel(place)
    two = int(one["spin_parity"]) == 1
    names = {"integer": " (integer S)" if two else "", "half_integer": " (half-integer S)"}
    for parity, dash in zip(("integer", "half_integer") if two else ("integer",), ("-", (0, (5, 2)))):
        part = one.sel(parity=parity)
        coefficients, covariance = part["spin_coefficient"].values, part["spin_covariance"].values
        if np.isfinite(coefficients).all():
            yield (names[parity], dash, *evaluate_class(coefficients, covariance, grid, float(one["spin_shift"])))

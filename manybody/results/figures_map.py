"""Figures over swept parameters: lines over one, maps over two, of relative gap and trusted spin."""

import numpy as np

from manybody.results.figure_style import (
    COLOURS,
    INK,
    MARKERS,
    below,
    even_choice,
    log_ticks,
    new_figure,
    spin_text,
    value_ticks,
)
from manybody.results.figure_view import NotDrawn
from manybody.results.schema import RESERVED_NAMES


def relative_gap_map(view):
    """The relative gap over the swept parameters at the largest size: lines per spin over one, a map over two."""
    swept, sites, point = _swept(view), view.sites, view.root
    usable = np.isfinite(point["relative_gap"])
    if not bool(usable.any()):
        raise NotDrawn("no point has a relative gap")
    size = int(sites[np.flatnonzero(usable.any([d for d in usable.dims if d != "sites"]).values)[-1]])
    place = _others(view, swept)
    if len(swept) == 1:
        return _lines(view, swept[0], point["relative_gap"].isel(place).sel(sites=size), size)
    spins = [s for s in view.spins if bool(usable.sel(spin=s, sites=size).any())]
    spin = spins[0]
    values = point["relative_gap"].isel(place).sel(sites=size, spin=spin)
    largest = float(np.nanmax(np.abs(values))) or 1.0
    figure, axes = new_figure(len(view.rules))
    for axis, rule in zip(axes[0], view.rules):
        one = values.sel(rule=rule).transpose(swept[1], swept[0])
        mesh = _mesh(axis, one, swept, cmap="PuOr", vmin=-largest, vmax=largest)
        axis.set_title(f"rule: {rule}", loc="left")
    axes[0, 0].set_ylabel(swept[1])
    figure.colorbar(mesh, ax=list(axes[0]), label="gap / |f_min \N{MINUS SIGN} f_mean|")
    caption = f"Relative gap over {swept[0]} and {swept[1]}, {size} sites, S = {spin_text(spin)} (the smallest spin)."
    return figure, caption + _hatched(values)


def trusted_spin_map(view, tolerance=0.05):
    """The smallest trustworthy spin over the swept parameters at the largest size that has a verdict."""
    swept = _swept(view)
    if "trust_spin" not in view.scaling:
        raise NotDrawn("no verdict on spin: it needs at least two spins")
    names = ["trust_spin", "trust_spin_low", "trust_spin_high", "trust_state"]
    verdict = view.scaling[names].isel(_others(view, swept))
    tolerance = float(verdict["within"].values[np.argmin(abs(verdict["within"].values - tolerance))])
    verdict = verdict.sel(within=tolerance)
    known = np.isfinite(verdict["trust_spin"])
    if not bool(known.any()):
        raise NotDrawn("no parameter set has a verdict on spin")
    size = int(view.sites[np.flatnonzero(known.any([d for d in known.dims if d != "sites"]).values)[-1]])
    verdict = verdict.sel(sites=size)
    if len(swept) == 1:
        return _trusted_lines(view, swept[0], verdict, size, tolerance)
    values = verdict["trust_spin"]
    figure, axes = new_figure(len(view.rules))
    low, high = float(np.nanmin(values)), float(np.nanmax(values))
    import matplotlib.colors as colors

    norm = colors.LogNorm(low, high) if high > low else colors.LogNorm(low * 0.8, low * 1.25)
    for axis, rule in zip(axes[0], view.rules):
        one = verdict.sel(rule=rule).transpose(swept[1], swept[0], ...)
        mesh = _mesh(axis, one["trust_spin"], swept, cmap="cividis_r", norm=norm)
        _numbers(axis, one, swept)
        axis.set_title(f"rule: {rule}", loc="left")
    axes[0, 0].set_ylabel(swept[1])
    bar = figure.colorbar(mesh, ax=list(axes[0]), label="smallest trustworthy spin")
    log_ticks(bar.ax.yaxis, spin_text)
    caption = (
        f"Smallest spin from which on the classical energy is within {tolerance:.0%} of the energy scale, {size} "
        "sites. Numbers in brackets are extrapolated beyond the largest spin computed."
    )
    return figure, caption + _hatched(values)


def _hatched(values):
    return "" if bool(np.isfinite(values).all()) else " Hatched: not known."


def _swept(view):
    names = [d for d in view.place if d not in RESERVED_NAMES and view.root.sizes[d] > 1]
    if not names:
        raise NotDrawn("the study sweeps no parameter")
    return names[:2]


def _others(view, swept):
    return {name: position for name, position in view.place.items() if name not in swept}


def _lines(view, name, values, size):
    figure, axes = new_figure(len(view.rules))
    at = view.root[name].values
    spins = even_choice(view.spins)
    error = view.root["quantum_energy_error"] / abs(view.root["classical_energy"] - view.root["classical_mean"])
    error = error.isel(_others(view, [name])).sel(sites=size)
    handles = {}
    for axis, rule in zip(axes[0], view.rules):
        for k, spin in enumerate(spins):
            one = values.sel(spin=spin, rule=rule).values
            bars = np.nan_to_num(error.sel(spin=spin, rule=rule).values)
            handles[f"S = {spin_text(spin)}"] = axis.errorbar(
                at, one, yerr=[bars, 0 * bars], color=COLOURS[k % len(COLOURS)], marker=MARKERS[k], ms=4
            )
        axis.axhline(0, color=INK, lw=0.8)
        axis.set_title(f"rule: {rule}", loc="left")
        axis.set_xlabel(name)
    axes[0, 0].set_ylabel("gap / |f_min \N{MINUS SIGN} f_mean|")
    below(axes[0, 0], handles)
    return figure, f"Relative gap over {name}, {size} sites."


def _trusted_lines(view, name, verdict, size, tolerance):
    figure, axes = new_figure()
    axis = axes[0, 0]
    at = view.root[name].values
    for k, rule in enumerate(view.rules):
        one = verdict.sel(rule=rule)
        value = one["trust_spin"].values
        low = np.nan_to_num(value - one["trust_spin_low"].values)
        high = np.nan_to_num(one["trust_spin_high"].values - value, posinf=0.0)
        beyond = one["trust_state"].values == 3
        colour = COLOURS[k]
        axis.errorbar(
            at, value, yerr=[np.maximum(low, 0), np.maximum(high, 0)], color=colour, lw=1.1, label=f"rule: {rule}"
        )
        axis.plot(at[~beyond], value[~beyond], MARKERS[k], color=colour)
        axis.plot(at[beyond], value[beyond], MARKERS[k], mfc="white", color=colour)
    axis.margins(y=0.12)
    low, high = axis.get_ylim()
    if low > 0 and high / low > 6:
        axis.set_yscale("log")
        log_ticks(axis.yaxis, spin_text)
    axis.set_xlabel(name)
    axis.set_ylabel("smallest trustworthy spin")
    handles, names = axis.get_legend_handles_labels()
    below(axis, dict(zip(names, handles, strict=True)))
    caption = (
        f"Smallest spin from which on the classical energy is within {tolerance:.0%} of the energy scale, {size} "
        "sites; open symbols are extrapolated beyond the largest spin computed. Bars: what the errors allow."
    )
    return figure, caption


def _mesh(axis, values, swept, **style):
    first, second = (values[name].values for name in swept)
    axis.set_facecolor("#eef1f4")
    axis.patch.set_hatch("////")
    axis.patch.set_edgecolor("#b9c3cc")
    axis.grid(False)
    axis.set_xlabel(swept[0])
    value_ticks(axis.xaxis, first)
    value_ticks(axis.yaxis, second)
    return axis.pcolormesh(first, second, np.ma.masked_invalid(values.values), shading="nearest", **style)


def _numbers(axis, one, swept):
    first, second = (one[name].values for name in swept)
    if len(first) * len(second) > 60:
        return
    values, state = one["trust_spin"].values, one["trust_state"].values
    for (row, column), value in np.ndenumerate(values):
        if np.isfinite(value):
            text = f"({spin_text(value)})" if state[row, column] == 3 else spin_text(value)
            box = {"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none", "alpha": 0.85}
            axis.text(first[column], second[row], text, ha="center", va="center", fontsize=7, bbox=box)

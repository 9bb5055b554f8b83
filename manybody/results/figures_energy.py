"""Figures of energies: the ladder against spin, and the convergence of the quantum energy with bond dimension."""

import numpy as np

from manybody.results.figure_style import (
    COLOURS,
    INK,
    MARKERS,
    QUIET,
    below,
    new_figure,
    spin_axis,
    spin_text,
    unit_text,
)
from manybody.results.figure_view import NotDrawn

_RUNGS = (
    # name, label, colour, marker, line, filled
    ("upper_symbol_energy", "lower bound: upper symbol", QUIET, "", (0, (1, 1.5)), True),
    ("cluster_bound", "lower bound: clusters", QUIET, "", (0, (5, 2)), True),
    ("harmonic_energy", "classical with first correction", COLOURS[2], "", (0, (7, 2, 1.5, 2)), True),
    ("product_energy", "best product state", COLOURS[1], "x", "", True),
    ("coherent_energy", "best coherent product", COLOURS[1], "o", "", False),
)


def ladder(view):
    """The energy ladder per site against spin for the largest size, one panel per rule."""
    usable = view.usable()
    if not bool(usable.any()):
        raise NotDrawn("no point has a quantum energy yet")
    size = _fullest_size(view, usable)
    rules = [rule for rule in view.rules if bool(usable.sel(sites=size, rule=rule).any())]
    figure, axes = new_figure(len(rules))
    classical = view.energy("classical_energy").sel(sites=size) / size
    handles, must, may = {}, [], []
    rungs = {}
    for axis, rule in zip(axes[0], rules):
        mask = usable.sel(sites=size, rule=rule).values
        at = view.spins[mask]
        energy = view.energy("quantum_energy").sel(sites=size, rule=rule).values[mask] / size
        error = view.energy("quantum_energy_error").sel(sites=size, rule=rule).values[mask] / size
        handles["classical minimum"] = axis.plot(
            view.spins, classical.sel(rule=rule), color=INK, lw=1.6, marker="_", ms=7, zorder=2
        )[0]
        must += [energy, energy - np.nan_to_num(error), classical.sel(rule=rule).values]
        for name, label, colour, marker, line, filled in _RUNGS:
            values = view.energy(name).sel(sites=size, rule=rule).values / size
            if not np.isfinite(values).any():
                continue
            handles[label] = axis.plot(
                view.spins,
                values,
                color=colour,
                marker=marker,
                ls=line,
                mfc=colour if filled else "none",
                ms=7,
                zorder=3,
            )[0]
            rungs.setdefault(label, []).append(values)
            (must if name in ("product_energy", "coherent_energy") else may).append(values)
        bars = axis.errorbar(
            at, energy, yerr=[np.nan_to_num(error), 0 * energy], fmt="D", color=COLOURS[0], ms=4, zorder=4
        )
        handles["quantum, 95 % error"] = bars
        axis.set_title(f"rule: {rule}", loc="left")
        spin_axis(axis.xaxis, view.spins)
    low, high = _frame(axes[0, 0], must, may)
    outside = [
        label
        for label, values in rungs.items()
        if not np.any(np.abs(_finite(values) - (low + high) / 2) < (high - low) / 2)
    ]
    handles = {label: handle for label, handle in handles.items() if label not in outside}
    axes[0, 0].set_ylabel(f"energy per site ({unit_text(view.unit)})")
    below(axes[0, 0], handles)
    error_note = "Error bars reach down to where the true quantum energy may lie; most are smaller than the symbols."
    cut = f" ({', '.join(outside)} wholly)" if outside else ""
    caption = (
        f"Energy ladder per site against spin, {size} sites. {error_note} Bounds and corrections far outside the frame "
        f"are cut off{cut}.{view.note()}"
    )
    return figure, caption


def convergence(view):
    """Energy above the best against bond dimension, one curve per point found by matrix-product states."""
    if "convergence" not in view.tree.children:
        raise NotDrawn("no point was solved by matrix-product states with a recorded convergence")
    data = view.tree["convergence"].dataset.isel(view.place)
    curves = []
    for size in view.sites[::-1]:
        for spin in view.spins:
            for rule in view.rules:
                label = {"sites": size, "spin": spin, "rule": rule}
                one, point = data.sel(label), view.point.sel(label)
                bond, energy = one["trace_bond_dimension"].values, one["trace_energy"].values
                good = np.isfinite(bond) & np.isfinite(energy)
                if good.sum() > 1 and np.isfinite(point["quantum_energy_error"]):
                    curves.append((label, bond[good], energy[good], float(point["quantum_energy_error"])))
    if not curves:
        raise NotDrawn("no chosen point has two stages of bond dimension")
    shown = curves[: len(COLOURS)]
    figure, axes = new_figure()
    axis = axes[0, 0]
    for k, (label, bond, energy, error) in enumerate(shown):
        scale = label["sites"]
        factor = float(view.factor.sel(spin=label["spin"], rule=label["rule"]))
        bottom = energy.min() - max(error, 1e-14 * abs(energy.min()))
        above = (energy - bottom) * factor / scale
        name = f"{label['sites']} sites, S = {spin_text(label['spin'])}"
        if len(view.rules) > 1:
            name += f", {label['rule']}"
        axis.plot(bond, above, color=COLOURS[k], marker=MARKERS[k], ms=4, label=name, lw=1.2)
        # the last error interval reaches down to zero, which is infinitely far on this axis: an arrow stands for it
        arrow = [[0.6 * above[-1]], [0]]
        axis.errorbar(bond[-1:], above[-1:], yerr=arrow, uplims=True, color=COLOURS[k], fmt="none", lw=1.2)
    axis.set_xscale("log", base=2)
    axis.set_yscale("log")
    axis.xaxis.set_major_formatter(lambda value, _: f"{value:g}")
    axis.set_xlabel("bond dimension")
    axis.set_ylabel(f"energy per site above the\nlower end of its error\n({unit_text(view.unit)})")
    handles, names = axis.get_legend_handles_labels()
    below(axis, dict(zip(names, handles, strict=True)))
    more = f" The first {len(shown)} of {len(curves)} points." if len(curves) > len(shown) else ""
    caption = (
        "Convergence of the quantum energy with bond dimension, measured from the lower end of the final 95 % error: "
        "the height of the last symbol of a curve is that error, and the arrow says that the true energy lies anywhere "
        f"below, down to zero on this scale.{more}{view.note()}"
    )
    return figure, caption


def _fullest_size(view, usable):
    """The largest among the sizes with the most points."""
    counts = usable.sum(("spin", "rule")).values
    return int(view.sites[np.flatnonzero(counts == counts.max())[-1]])


def _frame(axis, must, may):
    """Show all of `must`, and of `may` what is not far outside: bounds at small spin would flatten the rest."""
    values, others = _finite(must), _finite(may)
    low, high = values.min(), values.max()
    spread = high - low or 0.1 * (abs(high) or 1.0)
    near = others[(others > low - 0.5 * spread) & (others < high + 0.5 * spread)]
    low, high = min(low, near.min(initial=low)), max(high, near.max(initial=high))
    axis.set_ylim(low - 0.08 * spread, high + 0.08 * spread)
    return axis.get_ylim()


def _finite(arrays):
    values = np.concatenate([np.zeros(0), *(np.asarray(a, float).ravel() for a in arrays)])
    return values[np.isfinite(values)]

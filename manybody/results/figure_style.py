"""The look of all figures: one place for colours, markers, sizes, labels.

Colours differ in lightness as well as in hue, and every curve also has its own marker or dash, so that figures
survive a black-and-white printer and colour-blind eyes.
"""

from fractions import Fraction

import numpy as np

INK = "#22303c"
QUIET = "#8494a3"
PAPER = "#ffffff"
COLOURS = ("#12395b", "#c8611a", "#2f8f83", "#9b2f52", "#7d7ac2", "#b59a1e")
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "h")
DASHES = ("-", (0, (5, 2)), (0, (1.5, 1.5)), (0, (7, 2, 1.5, 2)), (0, (3, 1, 1, 1, 1, 1)), (0, (9, 3)))
WIDTH, HEIGHT = 3.5, 3.1
MANY = 6
"""Most curves in one panel; of longer lists an even choice is drawn and the caption says so."""

SETTINGS = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "axes.titlesize": 9,
    "axes.labelsize": 9,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.color": "#dfe5ea",
    "grid.linewidth": 0.6,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.fontsize": 7.5,
    "legend.frameon": False,
    "legend.handlelength": 2.6,
    "lines.linewidth": 1.4,
    "lines.markersize": 5,
    "errorbar.capsize": 2.5,
    "savefig.dpi": 200,
    "savefig.facecolor": PAPER,
    "svg.hashsalt": "manybody",
    "svg.fonttype": "path",
}


def new_figure(columns=1, rows=1, height=HEIGHT, width=WIDTH):
    """A Figure with its axes (rows, columns), not registered anywhere: nothing global is touched."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(max(width * columns, 4.6), height * rows), layout="constrained")
    axes = figure.subplots(rows, columns, squeeze=False, sharey="row")
    return figure, axes


def spin_text(spin) -> str:
    """3/2, 2, ..."""
    return str(Fraction(float(spin)).limit_denominator(2))


def unit_text(unit) -> str:
    """How an axis names the unit of energy."""
    return "coupling units" if unit in ("", "1") else unit


def depth_colours():
    """A colour map for a component from -1 (dark, away) over 0 (grey) to 1 (orange, towards the reader)."""
    from matplotlib.colors import LinearSegmentedColormap

    return LinearSegmentedColormap.from_list("depth", ["#0b2743", "#5d7285", "#a9b4bd", "#d99a5c", "#d2600a"])


def log_ticks(axis, name="{:g}".format):
    """Ticks named 0.2, 0.5, 1, 2, ... where a logarithmic axis spans little, powers of ten otherwise."""
    from matplotlib.ticker import LogFormatterSciNotation, LogLocator, NullLocator

    low, high = axis.get_view_interval()
    if high / low < 300:
        axis.set_major_locator(LogLocator(subs=(1, 2, 5)))
        axis.set_major_formatter(lambda value, _: name(value))
        axis.set_minor_locator(NullLocator())
    else:
        axis.set_major_formatter(LogFormatterSciNotation())


def even_choice(values, most=MANY):
    """At most `most` of the values, evenly spread, ends included."""
    values = list(values)
    if len(values) <= most:
        return values
    picks = np.unique(np.round(np.linspace(0, len(values) - 1, most)).astype(int))
    return [values[k] for k in picks]


def spin_axis(axis, spins):
    """Ticks at the spins of the study, as fractions; on long lists only some are named."""
    spins = even_choice(sorted(spins), 9)
    axis.set_ticks(spins, [spin_text(s) for s in spins])
    axis.set_ticks([], minor=True)
    axis.set_label_text("spin S")


def below(axes, handles):
    """One legend under all panels of a figure, {label: handle}, in as many columns as fit its width."""
    widest = max(len(label) for label in handles) * 0.052 + 0.6
    columns = int(np.clip(axes.figure.get_figwidth() / widest, 1, len(handles)))
    axes.figure.legend(handles.values(), handles.keys(), loc="outside lower center", ncols=columns, columnspacing=1.4)


def value_ticks(axis, values):
    """Ticks at the swept values themselves, or at some of them."""
    chosen = even_choice(values, 8)
    axis.set_ticks(chosen, [f"{value:.3g}" for value in chosen])

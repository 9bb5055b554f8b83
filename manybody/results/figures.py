"""Figures of a results file: which ones there are, drawing those the data allow, saying why the others are left out."""

from dataclasses import dataclass, field
from pathlib import Path

from manybody.results import figure_style
from manybody.results.dataset import open_results
from manybody.results.figure_view import NotDrawn, look
from manybody.results.figures_energy import convergence, ladder
from manybody.results.figures_gap import gap_against_sites, gap_against_spin
from manybody.results.figures_map import relative_gap_map, trusted_spin_map
from manybody.results.figures_space import configuration

FIGURES = {
    "ladder": ("Energy ladder", ladder),
    "gap-spin": ("Gap against spin", gap_against_spin),
    "gap-sites": ("Gap against size", gap_against_sites),
    "gap-parameters": ("Gap over the swept parameters", relative_gap_map),
    "trusted-spin": ("Smallest trustworthy spin over the swept parameters", trusted_spin_map),
    "configuration": ("Classical configuration", configuration),
    "convergence": ("Convergence of the quantum energy", convergence),
}
"""name: (title, function of a View giving (matplotlib Figure, caption) or raising NotDrawn)."""

FORMATS = ("png", "svg", "pdf")


@dataclass(frozen=True)
class Drawn:
    """One figure: its name in FIGURES, title, caption, and the files written (or the matplotlib Figure itself)."""

    name: str
    title: str
    caption: str
    paths: tuple[Path, ...] = ()


@dataclass(frozen=True)
class DrawOutcome:
    """drawn: the figures made; left_out: {name: reason}."""

    drawn: tuple[Drawn, ...]
    left_out: dict[str, str] = field(default_factory=dict)


def draw(results_path, out_dir, formats=("png", "svg"), normalization="energy", select=None, only=None) -> DrawOutcome:
    """Draw every figure that the results allow into out_dir (made if missing), as <name>.<format>.

    normalization: "energy", or "spin" for H = sum J S.S. select: {"lattice" or parameter: value} to show, the first
    value otherwise. only: names of figures, all by default.
    Raises ValueError for an unknown format, figure or choice, NormalizationError where "spin" makes no sense, and what
    dataset.open_results raises.
    """
    formats = tuple(formats)
    unknown = [f for f in formats if f not in FORMATS]
    if unknown or not formats:
        raise ValueError(f"format {unknown[0] if unknown else ''!r}: choose among {', '.join(FORMATS)}")
    out_dir = Path(out_dir)
    made, left_out = figures_of(open_results(results_path), normalization, select, only)
    out_dir.mkdir(parents=True, exist_ok=True)
    drawn = []
    for name, title, figure, caption in made:
        paths = []
        for kind in formats:
            path = out_dir / f"{name}.{kind}"
            save(figure, path, kind, title, caption)
            paths.append(path)
        drawn.append(Drawn(name, title, caption, tuple(paths)))
    return DrawOutcome(tuple(drawn), left_out)


def figures_of(tree, normalization="energy", select=None, only=None):
    """([(name, title, matplotlib Figure, caption)], {name: reason it is left out}) of a tree; writes nothing."""
    import matplotlib

    chosen = FIGURES if only is None else {name: FIGURES[name] for name in _known(only)}
    view = look(tree, normalization, select)
    made, left_out = [], {}
    with matplotlib.rc_context(figure_style.SETTINGS):
        for name, (title, function) in chosen.items():
            try:
                figure, caption = function(view)
            except NotDrawn as reason:
                left_out[name] = str(reason)
            else:
                made.append((name, title, figure, caption))
    return made, left_out


def save(figure, target, kind, title, caption):
    """Write one figure to a path or binary file; the same data give the same bytes (no date is stored)."""
    import matplotlib

    metadata = {
        "png": {"Title": title, "Description": caption, "Software": None},
        "svg": {"Title": title, "Description": caption, "Date": None, "Creator": None},
        "pdf": {"Title": title, "Subject": caption, "CreationDate": None, "Creator": None, "Producer": None},
    }[kind]
    with matplotlib.rc_context(figure_style.SETTINGS):
        figure.savefig(target, format=kind, metadata=metadata)


def _known(names):
    names = [names] if isinstance(names, str) else list(names)
    for name in names:
        if name not in FIGURES:
            raise ValueError(f"no figure is called {name!r}; choose among {', '.join(FIGURES)}")
    return names

"""The classical configuration in space, with what is proved about it."""

import numpy as np

from manybody.results.dataset import flag_words
from manybody.results.figure_style import INK, WIDTH, depth_colours, new_figure
from manybody.results.figure_view import NotDrawn

MOST_SITES = 900
LONGEST_LINE = 24


def configuration(view):
    """Unit vectors of the classical minimum at their sites: direction in the plane as arrows, the rest as colour."""
    if "configuration" not in view.tree.children:
        raise NotDrawn("the dataset holds no classical configuration")
    data = view.tree["configuration"].dataset
    if not {"classical_configuration", "positions"} <= set(data.data_vars):
        raise NotDrawn("the dataset holds no configuration with positions of its sites")
    vectors, positions = (_at(data[name], view) for name in ("classical_configuration", "positions"))
    known = np.isfinite(vectors).all("component").any("site") & np.isfinite(positions).all("component").any("site")
    sizes = [n for n in view.sites[known.values] if n <= MOST_SITES]
    if not sizes:
        raise NotDrawn(f"no size of at most {MOST_SITES} sites has a configuration with positions")
    size = int(sizes[-1])
    n = vectors.sel(sites=size).transpose("site", "component").values[:size]
    r = positions.sel(sites=size).transpose("site", "component").values[:size]
    all_sites = size
    line = np.linalg.matrix_rank(r - r.mean(axis=0), tol=1e-9) <= 1
    turned = int(view.root.attrs.get("symmetry_axes", 0)) == 3
    if line and size > LONGEST_LINE:
        size, n, r = LONGEST_LINE, n[:LONGEST_LINE], r[:LONGEST_LINE]
    if turned:
        n = _lying(n)
    r, axes_of_view = _along(r, n) if line and not turned else _facing(r)
    if not turned:
        n = n @ axes_of_view.T
    reach = _spacing(r)
    low, high = r[:, :2].min(axis=0) - reach, r[:, :2].max(axis=0) + reach
    ratio = (high[1] - low[1]) / (high[0] - low[0])
    figure, axes = new_figure(width=1.4 * WIDTH, height=float(np.clip(3.9 * ratio + 0.9, 1.6, 5.5)))
    axis = axes[0, 0]
    if "pairs" in data:
        pairs = _at(data["pairs"], view).sel(sites=all_sites).values
        _bonds(axis, r, pairs[((pairs >= 0) & (pairs < size)).all(axis=1)])
    upright = np.hypot(n[:, 0], n[:, 1]) < 0.45
    colour = _arrows(axis, r, n, upright, reach)
    axis.set_aspect("equal")
    axis.grid(False)
    axis.set_xlim(low[0], high[0])
    axis.set_ylim(low[1], high[1])
    if line:
        axis.set_xlabel("position along the line (lattice constants)")
        axis.set_yticks([])
    else:
        seen = "" if np.array_equal(axes_of_view, np.eye(3)) else " as seen"
        axis.set_xlabel(f"x{seen} (lattice constants)")
        axis.set_ylabel(f"y{seen} (lattice constants)")
    if np.abs(n[:, 2]).max() > 0.02:
        figure.colorbar(colour, cax=axis.inset_axes([1.03, 0, 0.035, 1]), label="component out\nof the plane")
    title, proof = _proof(view, all_sites)
    axis.set_title(f"classical minimum, {title}", loc="left")
    notes = [f"The first {size} sites are shown."] if size < all_sites else []
    if upright.any():
        notes.append("Circle: mostly out of the plane towards the reader, cross: away from the reader.")
    if turned:
        notes.append("The energy does not change when all vectors are turned together; here they lie in the plane.")
    elif line:
        notes.append("The plane shown holds the line of sites and the main direction of the vectors across it.")
    elif np.ptp(r[:, 2]) > 1e-9:
        notes.append("The sites are seen from the direction in which they spread least.")
    caption = (
        f"Classical minimum, {all_sites} sites. {' '.join([proof, *notes])} Other minima of the same energy may exist."
        f"{view.note()}"
    )
    return figure, caption


def _arrows(axis, r, n, upright, reach):
    """Arrows for vectors in the plane, circles and crosses for upright ones; returns what a colour bar needs."""
    shades = depth_colours()
    arrows = axis.quiver(
        *(np.ma.masked_array(column, upright) for column in (r[:, 0], r[:, 1], n[:, 0], n[:, 1], n[:, 2])),
        **{"angles": "xy", "scale_units": "xy", "scale": 1.3 / reach, "pivot": "mid", "clim": (-1, 1), "zorder": 3},
        **{"width": 0.07 * reach, "units": "xy", "headwidth": 3.4, "headlength": 3.6, "headaxislength": 3.6},
        **{"cmap": shades, "edgecolor": INK, "linewidth": 0.4},
    )
    for up, marker in ((True, "o"), (False, "X")):
        chosen = upright & ((n[:, 2] > 0) == up)
        colours = shades((n[chosen, 2] + 1) / 2)
        axis.scatter(*r[chosen, :2].T, marker=marker, s=48, c=colours, edgecolor=INK, linewidth=0.6, zorder=4)
    return arrows


def _at(array, view):
    return array.isel({k: v for k, v in view.place.items() if k in array.dims})


def _facing(r):
    """Positions seen from the direction in which they spread least, and the rotation (3, 3) to that view."""
    if np.ptp(r[:, 2]) < 1e-9:
        return r, np.eye(3)
    spread = r - r.mean(axis=0)
    axes = np.linalg.svd(spread, full_matrices=True)[2]
    if np.linalg.det(axes) < 0:
        axes[2] *= -1
    return spread @ axes.T, axes


def _along(r, n):
    """The same for sites on one line: the picture holds the line and what the vectors mainly do across it."""
    first = np.linalg.svd(r - r.mean(axis=0), full_matrices=True)[2][0]
    first = first * np.sign(first[np.argmax(np.abs(first))])
    across = np.linalg.svd(n - np.outer(n @ first, first), full_matrices=True)[2][0]
    across = across - (across @ first) * first
    if np.linalg.norm(across) < 1e-6:
        across = np.linalg.svd(first[None])[2][1]
    across = across / np.linalg.norm(across) * (np.sign(across[np.argmax(np.abs(across))]))
    axes = np.stack([first, across, np.cross(first, across)])
    return (r - r[0]) @ axes.T, axes


def _lying(n):
    """Vectors turned together so that they lie in the picture as far as possible, the first one upwards."""
    axes = np.linalg.svd(n, full_matrices=True)[2]
    if np.linalg.det(axes) < 0:
        axes[2] *= -1
    n = n @ axes.T
    angle = np.pi / 2 - np.arctan2(n[0, 1], n[0, 0])
    turn = np.array([[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]])
    return n @ turn.T


def _spacing(r):
    """Distance between neighbouring sites in the picture."""
    if len(r) < 2:
        return 1.0
    from scipy.spatial import cKDTree

    distance = cKDTree(r[:, :2]).query(r[:, :2], k=2)[0][:, 1]
    distance = distance[distance > 1e-6]
    return float(np.median(distance)) if len(distance) else 1.0


def _bonds(axis, r, pairs):
    """Pairs as thin lines; those that go round a periodic boundary would cross the picture and are left out."""
    from matplotlib.collections import LineCollection

    ends = r[pairs][:, :, :2]
    length = np.linalg.norm(ends[:, 0] - ends[:, 1], axis=1)
    keep = length <= 2.2 * np.median(length) if len(length) else np.zeros(0, bool)
    axis.add_collection(LineCollection(ends[keep], colors="#c5ced6", linewidths=1, zorder=1))


def _proof(view, size):
    """(title, sentence) on the certificate."""
    point = view.point.sel(sites=size)
    word = str(flag_words(point["classical_certified"]))
    if word == "yes":
        return "proved global", "It is proved to be a global minimum."
    gap = float(point["classical_energy"] - point["classical_energy_bound"])
    if np.isfinite(gap):
        part = gap / abs(float(point["classical_energy"])) if float(point["classical_energy"]) else np.nan
        return "not proved global", f"It is not proved global: the rigorous bound is {part:.2g} of the energy lower."
    return "not proved global", "It is the lowest of all minima found, without a proof."

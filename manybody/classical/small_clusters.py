"""A rigorous lower bound of the minimum over two or three unit vectors, by branch and bound.

The product of spheres, reduced by the common rotations that leave f unchanged, is cut into cells of at most four
dimensions. Along any product of great circles a part of f with rank k_i at site i is a bounded function of exponential
type, so its second derivative is at most sup|part| (sum_i k_i v_i)^2 for speeds v_i (Bernstein's inequality); this
bounds f on a cell by value and gradient at its centre. About a known minimum with positive curvature the bound of the
third derivative of the same kind gives a ball in which nothing is lower. Cells that are neither above the known minimum
nor inside such a ball are halved.
"""

from dataclasses import dataclass

import numpy as np

from manybody.classical.sphere_product import normalized, tangent_frames
from manybody.model.energy import EnergyFunction

STRETCH = 1.2019  # cubed-sphere coordinates: the metric tensor has no eigenvalue above 13/9
HALF_FACE = np.pi / 4


@dataclass(frozen=True)
class _Slice:
    """How the vectors are parametrized: `kinds` per site, "fixed", "arc" (half a great circle from
    `axis`) or "sphere".
    """

    kinds: tuple[str, ...]
    axis: np.ndarray
    side: np.ndarray

    @property
    def dimension(self) -> int:
        return sum({"fixed": 0, "arc": 1, "sphere": 2}[kind] for kind in self.kinds)


def _slice(f: EnergyFunction) -> _Slice:
    axes = f.symmetry_axes()
    axis = axes[0] if len(axes) else np.array([0.0, 0.0, 1.0])
    first = {0: ("sphere", "sphere"), 1: ("arc", "sphere"), 3: ("fixed", "arc")}[len(axes)]
    kinds = (*first, *["sphere"] * f.sites)[: f.sites]
    return _Slice(kinds, axis, tangent_frames(axis)[0])


def can_be_bounded(f: EnergyFunction) -> bool:
    """Whether the search has at most four dimensions."""
    return _slice(f).dimension <= 4


def lower_bound(f: EnergyFunction, minima: np.ndarray, evaluations: int = 400_000) -> float:
    """A number not above min f. minima (M, N, 3): the known lowest minima, polished.

    It equals their value, up to about 1e-10 of the couplings, where these are isolated apart from common rotations;
    otherwise it is what the allowed number of evaluations gave.
    """
    cut = _slice(f)
    bounds = _Bounds(f, cut)
    best = float(f.value(minima).min())
    slack = 1e-10 * bounds.size
    centres, radii = _balls(f, cut, bounds, minima)
    cells = _first_cells(cut)
    spent, floor = 0, np.inf
    while len(cells):
        if spent + len(cells) > evaluations:
            return min(best - slack, float(floor))
        spent += len(cells)
        n = _points(cut, cells)
        reach = _reach(cut, cells)
        values, gradients = f.value_and_gradient(n)
        lowest = values - bounds.remainder(reach) - np.sum(_slopes(cut, n, gradients) * reach, axis=1)
        open_cells = lowest < best - slack
        if len(centres):
            for centre, radius in zip(centres, radii, strict=True):
                away = np.arctan2(np.linalg.norm(np.cross(n, centre), axis=-1), np.einsum("ria,ia->ri", n, centre))
                open_cells &= np.linalg.norm(away + reach, axis=1) > radius
        cells, floor = cells[open_cells], lowest[open_cells].min(initial=np.inf)
        cells = _halved(cut, cells)
    return best - slack


class _Bounds:
    """Suprema of the parts of f and their frequencies on the slice."""

    def __init__(self, f: EnergyFunction, cut: _Slice):
        moving = np.array([kind != "fixed" for kind in cut.kinds], dtype=float)
        suprema, speeds = [], []
        for group in f.groups:
            for sites, block in zip(group.sites, group.coefficients, strict=True):
                # the harmonics of one rank form a unit vector
                matrix = block.reshape(block.shape[0], -1)
                suprema.append(np.linalg.norm(matrix, ord=2) if block.ndim <= 2 else np.linalg.norm(block))
                speed = np.zeros(f.sites)
                speed[sites] = group.ranks
                speeds.append(speed * moving)
        self.suprema, self.speeds = np.array(suprema), np.array(speeds)
        self.size = float(self.suprema.sum())

    def remainder(self, reach: np.ndarray) -> np.ndarray:
        """(R,) largest second-order change of f when site i moves by at most reach (R, N)."""
        return 0.5 * (reach @ self.speeds.T) ** 2 @ self.suprema

    def third(self) -> float:
        """Largest third derivative along a path of unit speed."""
        return float(np.sum(self.suprema * np.linalg.norm(self.speeds, axis=1) ** 3))


def _balls(f: EnergyFunction, cut: _Slice, bounds: _Bounds, minima: np.ndarray) -> tuple[np.ndarray, list[float]]:
    """Minima turned into the slice, and the radius within which f is nowhere lower."""
    centres, radii = [], []
    for n in minima:
        n = _turned(cut, n)
        columns = []
        for site, kind in enumerate(cut.kinds):
            e1, e2 = tangent_frames(n[site])
            if kind == "arc":
                along = np.cross(np.cross(cut.axis, cut.side), n[site])
                frame = [along]
            else:
                frame = [e1, e2] if kind == "sphere" else []
            for vector in frame:
                column = np.zeros((f.sites, 3))
                column[site] = vector
                columns.append(column.ravel())
        basis = np.array(columns)
        lowest = float(np.linalg.eigvalsh(basis @ f.hessian(n) @ basis.T)[0])
        third = bounds.third()
        if lowest > 1e-6 * bounds.size and third > 0:
            centres.append(n)
            radii.append(2.9 * lowest / third)
    return np.array(centres), radii


def _turned(cut: _Slice, n: np.ndarray) -> np.ndarray:
    """A common rotation of n that f allows and that puts it into the slice."""
    other = np.cross(cut.axis, cut.side)
    if cut.kinds[0] == "sphere":
        return n
    if cut.kinds[0] == "fixed":
        e1, e2 = tangent_frames(n[0])
        n = n @ np.stack([e1, e2, n[0]], axis=1) @ np.stack([cut.side, other, cut.axis])
    site = cut.kinds.index("arc") if "arc" in cut.kinds else None
    if site is None:
        return n
    x, y = n[site] @ cut.side, n[site] @ other
    size = np.hypot(x, y)
    if size < 1e-12:
        return n
    c, s = x / size, y / size
    a, b, z = n @ cut.side, n @ other, n @ cut.axis
    return np.stack([c * a + s * b, c * b - s * a, z], axis=1) @ np.stack([cut.side, other, cut.axis])


# A cell is a row of numbers per site: arc (centre, half width); sphere (face, xi, eta, half widths of both).

_WIDTH = {"fixed": 0, "arc": 2, "sphere": 5}


def _first_cells(cut: _Slice) -> np.ndarray:
    cells = np.zeros((1, 0))
    for kind in cut.kinds:
        if kind == "arc":
            part = np.array([[np.pi * (k + 0.5) / 4, np.pi / 8] for k in range(4)])
        elif kind == "sphere":
            quarter = HALF_FACE / 2
            part = np.array(
                [
                    [face, a, b, quarter, quarter]
                    for face in range(6)
                    for a in (-quarter, quarter)
                    for b in (-quarter, quarter)
                ]
            )
        else:
            part = np.zeros((1, 0))
        left, right = np.meshgrid(np.arange(len(cells)), np.arange(len(part)), indexing="ij")
        cells = np.concatenate([cells[left.ravel()], part[right.ravel()]], axis=1)
    return cells


def _parts(cut: _Slice, cells: np.ndarray):
    position = 0
    for site, kind in enumerate(cut.kinds):
        yield site, kind, position, cells[:, position : position + _WIDTH[kind]]
        position += _WIDTH[kind]


def _points(cut: _Slice, cells: np.ndarray) -> np.ndarray:
    n = np.empty((len(cells), len(cut.kinds), 3))
    for site, kind, _, part in _parts(cut, cells):
        if kind == "fixed":
            n[:, site] = cut.axis
        elif kind == "arc":
            n[:, site] = np.cos(part[:, :1]) * cut.axis + np.sin(part[:, :1]) * cut.side
        else:
            face = part[:, 0].astype(int)
            local = np.stack([np.ones(len(part)), np.tan(part[:, 1]), np.tan(part[:, 2])], axis=1)
            local[:, 0] = np.where(face >= 3, -1.0, 1.0)
            shift = (np.arange(3)[None] - face[:, None]) % 3
            n[:, site] = normalized(np.take_along_axis(local, shift, axis=1))
    return n


def _reach(cut: _Slice, cells: np.ndarray) -> np.ndarray:
    """(R, N): no point of the cell is farther from its centre."""
    reach = np.zeros((len(cells), len(cut.kinds)))
    for site, kind, _, part in _parts(cut, cells):
        if kind == "arc":
            reach[:, site] = part[:, 1]
        elif kind == "sphere":
            reach[:, site] = STRETCH * np.hypot(part[:, 3], part[:, 4])
    return reach


def _slopes(cut: _Slice, n: np.ndarray, gradients: np.ndarray) -> np.ndarray:
    slopes = np.linalg.norm(gradients, axis=-1)
    for site, kind in enumerate(cut.kinds):
        if kind == "arc":
            along = np.cross(np.cross(cut.axis, cut.side), n[:, site])
            slopes[:, site] = np.abs(np.sum(along * gradients[:, site], axis=-1))
    return slopes


def _halved(cut: _Slice, cells: np.ndarray) -> np.ndarray:
    """Every cell cut in two across its widest side."""
    centres, widths = [], []
    for _, kind, position, _ in _parts(cut, cells):
        if kind == "arc":
            centres.append(position)
            widths.append(position + 1)
        elif kind == "sphere":
            centres += [position + 1, position + 2]
            widths += [position + 3, position + 4]
    rows = np.arange(len(cells))
    widest = np.argmax(cells[:, widths], axis=1)
    centre, width = np.array(centres)[widest], np.array(widths)[widest]
    half = cells[rows, width] / 2
    low, high = cells.copy(), cells.copy()
    for part, sign in ((low, -1), (high, 1)):
        part[rows, width] = half
        part[rows, centre] += sign * half
    return np.concatenate([low, high])

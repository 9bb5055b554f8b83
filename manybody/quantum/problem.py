"""A spin operator made ready for sweeps: frames, conserved charge, real coefficients, site order, matrix-product
operator."""

import itertools
from dataclasses import dataclass, replace

import numpy as np

from manybody.model.quantization import SpinOperator
from manybody.quantum.ladder import ladder_table, ladder_terms
from manybody.quantum.matrix_product_operator import Letter, OperatorSite, Terms, build
from manybody.quantum.site_order import site_order

NOISE = 1e-13
FEW_LEVELS = 8


@dataclass(frozen=True, eq=False)
class Problem:
    """Everything below is in sweep order except `frames`; position p holds site order[p].

    operator: the SpinOperator given. frames (N, 3, 3) by site: the solved operator is operator.rotated(frames), so a
    vector v of the solved frame is frames[i].T @ v in the given one. axis (3,): conserved axis in the given frame (NaN
    without). levels (N,): local states kept, the highest m first. local: their charges (S + m, zeros without
    conservation). sites: matrix-product operator without the constant. real: all numbers are real. norm: bound on the
    operator norm without constant.
    """

    operator: SpinOperator
    frames: np.ndarray
    axis: np.ndarray
    order: np.ndarray
    spins: np.ndarray
    levels: np.ndarray
    local: list[np.ndarray]
    sites: list[OperatorSite]
    terms: Terms
    constant: float
    real: bool
    norm: float

    @property
    def conserved(self) -> bool:
        return bool(np.isfinite(self.axis[0]))

    @property
    def width(self) -> int:
        return max(site.delta_right.size for site in self.sites)

    @property
    def truncated(self) -> bool:
        """Some site keeps fewer levels than its spin has."""
        return bool((self.levels < np.round(2 * self.spins) + 1).any())

    def directions(self, start: np.ndarray) -> np.ndarray:
        """Unit vectors (N, 3) of the given frame in sweep order and solved frame."""
        return np.einsum("iab,ib->ia", self.frames, start)[self.order]

    def with_levels(self, levels: np.ndarray) -> "Problem":
        matrices = letter_matrices(self.terms, self.spins, levels)
        sites = build(self.terms, matrices, self.conserved)
        return replace(self, levels=levels, local=[np.zeros(n, np.int64) for n in levels], sites=sites)


def prepare(operator: SpinOperator, start: np.ndarray, conserve: bool = True) -> Problem:
    """See Problem. start (N, 3): a classical configuration, which fixes the local frames where nothing is conserved."""
    axes = operator.symmetry_axes() if conserve else np.zeros((0, 3))
    conserved = len(axes) > 0
    if conserved:
        axis = np.array([0.0, 0.0, 1.0]) if len(axes) == 3 else axes[0] / np.linalg.norm(axes[0])
        frames = np.repeat(_turn_to_z(axis)[None], operator.sites, axis=0)
    else:
        axis = np.full(3, np.nan)
        frames = local_frames(start)
    frames, solved, real = _real_frames(operator, frames, conserved)
    order = site_order(operator.symbol)
    terms, constant, norm = _collect(solved, order, conserved, real)
    spins = operator.spins[order]
    full = np.round(2 * spins).astype(np.int64) + 1
    levels = full if conserved else np.minimum(full, FEW_LEVELS)
    local = [np.arange(n)[::-1].astype(np.int64) if conserved else np.zeros(n, np.int64) for n in levels]
    local = [np.ascontiguousarray(charges) for charges in local]
    sites = build(terms, letter_matrices(terms, spins, levels), conserved)
    return Problem(operator, frames, axis, order, spins, levels, local, sites, terms, constant, real, norm)


def letter_matrices(terms: Terms, spins: np.ndarray, levels: np.ndarray) -> list[dict[Letter, np.ndarray]]:
    """Matrices of all letters at every position, cut to the first levels."""
    letters = {letter for word in terms.letters for letter in word} or {(1, 0)}
    known: dict[tuple, dict[Letter, np.ndarray]] = {}
    result = []
    for spin, count in zip(spins.tolist(), levels.tolist(), strict=True):
        if (spin, count) not in known:
            known[spin, count] = {letter: letter_matrix(spin, *letter)[:count, :count] for letter in letters}
        result.append(known[spin, count])
    return result


def letter_matrix(spin: float, rank: int, step: int) -> np.ndarray:
    """Ladder operator of one spin, index 0 being m = S."""
    table = ladder_table(spin, rank)[rank + step]
    source = np.arange(table.size)
    target = source - step
    inside = (target >= 0) & (target < table.size)
    matrix = np.zeros((table.size, table.size))
    matrix[target[inside], source[inside]] = table[inside]
    return matrix


def _collect(operator: SpinOperator, order: np.ndarray, conserved: bool, real: bool) -> tuple[Terms, float, float]:
    place = np.empty(order.size, np.int64)
    place[order] = np.arange(order.size)
    constant, norm = operator.symbol.constant, 0.0
    pieces: dict[tuple, complex] = {}
    raw = list(ladder_terms(operator))
    largest = max((np.abs(coefficients).max() for *_, coefficients in raw), default=0.0)
    for ranks, steps, sites, coefficients in raw:
        if not ranks:
            constant += float(coefficients.real.sum())
            continue
        if conserved and sum(steps) != 0:
            continue
        positions = place[sites]
        ascending = np.argsort(positions, axis=1)
        for row, arrangement, value in zip(positions.tolist(), ascending.tolist(), coefficients.tolist(), strict=True):
            if abs(value) > NOISE * largest:
                word = tuple((ranks[k], steps[k]) for k in arrangement)
                key = (tuple(row[k] for k in arrangement), word)
                pieces[key] = pieces.get(key, 0.0) + value
                norm += abs(value)
    values = np.array(list(pieces.values()), dtype=complex)
    values = np.ascontiguousarray(values.real) if real else values
    return Terms(order.size, [key[0] for key in pieces], [key[1] for key in pieces], values), constant, norm


def _turn_to_z(axis: np.ndarray) -> np.ndarray:
    """Proper rotation with R axis = z; the identity for z itself."""
    z = np.array([0.0, 0.0, 1.0])
    if np.allclose(axis, z, atol=1e-14):
        return np.eye(3)
    helper = np.eye(3)[np.argmin(np.abs(axis))]
    x = np.cross(helper, axis)
    x /= np.linalg.norm(x)
    return np.array([x, np.cross(axis, x), axis])


def local_frames(n: np.ndarray) -> np.ndarray:
    """(N, 3, 3) proper rotations that turn every n_i to z and the normal of their common plane, if there is one, to
    y."""
    _, values, axes = np.linalg.svd(n)
    normal = axes[2] if len(values) < 3 or values[2] < 1e-8 * values[0] else None
    frames = []
    for v in n:
        y = normal if normal is not None else np.cross(v, np.eye(3)[np.argmin(np.abs(v))])
        y = y - (y @ v) * v
        y = y / np.linalg.norm(y)
        frames.append(np.array([np.cross(y, v), y, v]))
    return np.array(frames)


def _real_frames(operator: SpinOperator, frames: np.ndarray, conserved: bool):
    """Frames, rotated operator and whether its ladder coefficients are real, after trying rotations about z site by
    site."""
    solved = operator if np.allclose(frames, np.eye(3), atol=1e-14) else operator.rotated(frames)
    if _imaginary_part(solved, conserved) <= NOISE:
        return frames, solved, True
    angles = _angles(solved, conserved)
    for sign in (1.0, -1.0):
        turned = _about_z(sign * angles) @ frames
        candidate = operator.rotated(turned)
        if _imaginary_part(candidate, conserved) <= 1e-12:
            return turned, candidate, True
    if not conserved:
        # A common turn of the whole model may make it real even where the classical state is not planar.
        for permutation in itertools.permutations(range(3)):
            turn = np.eye(3)[list(permutation)]
            turn *= np.linalg.det(turn)
            turned = np.repeat(turn[None], operator.sites, axis=0)
            candidate = operator.rotated(turned)
            if _imaginary_part(candidate, conserved) <= NOISE and (2 * operator.spins < FEW_LEVELS).all():
                return turned, candidate, True
    return frames, solved, False


def _imaginary_part(operator: SpinOperator, conserved: bool) -> float:
    largest, imaginary = 0.0, 0.0
    for _, steps, _, coefficients in ladder_terms(operator):
        if not (conserved and sum(steps)):
            largest = max(largest, np.abs(coefficients).max())
            imaginary = max(imaginary, np.abs(coefficients.imag).max())
    return imaginary / largest if largest else 0.0


def _angles(operator: SpinOperator, conserved: bool) -> np.ndarray:
    """Angles (N,) such that exp(i sum steps_k angle_k) makes coefficients real along a spanning forest of the terms."""
    constraints = []
    terms = [item for item in ladder_terms(operator) if any(item[1]) and not (conserved and sum(item[1]))]
    largest = max((np.abs(coefficients).max() for *_, coefficients in terms), default=0.0)
    for _, steps, sites, coefficients in terms:
        moving = [k for k, step in enumerate(steps) if step]
        for row, value in zip(sites.tolist(), coefficients.tolist(), strict=True):
            if abs(value) > 1e-10 * largest:
                constraints.append(([(row[k], steps[k]) for k in moving], np.angle(value)))
    angle = np.full(operator.sites, np.nan)
    constraints.sort(key=lambda item: len(item[0]))
    while True:
        progress = False
        for parts, phase in constraints:
            unknown = [(site, step) for site, step in parts if np.isnan(angle[site])]
            if len({site for site, _ in unknown}) == 1:
                site, step = unknown[0]
                known = sum(q * angle[other] for other, q in parts if other != site)
                angle[site] = (-phase - known) / step
                progress = True
        if not progress:
            waiting = np.flatnonzero(np.isnan(angle))
            if waiting.size == 0:
                return angle
            touching = [site for parts, _ in constraints for site, _ in parts if np.isnan(angle[site])]
            angle[touching[0] if touching else waiting] = 0.0


def _about_z(angles: np.ndarray) -> np.ndarray:
    turns = np.zeros((angles.size, 3, 3))
    turns[:, 0, 0] = turns[:, 1, 1] = np.cos(angles)
    turns[:, 1, 0] = np.sin(angles)
    turns[:, 0, 1] = -turns[:, 1, 0]
    turns[:, 2, 2] = 1.0
    return turns

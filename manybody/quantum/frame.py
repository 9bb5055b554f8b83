"""The frame in which an operator is easiest: its conserved axis along z, its matrix real.

A matrix in the S^z basis is real exactly when the symbol does not change under n_y -> -n_y at all sites. That can
often be reached by turning all sites together, or, where S^z is conserved, each site about z.
"""

from collections import deque
from dataclasses import dataclass

import numpy as np

from manybody.model.harmonics import CARTESIAN, harmonics
from manybody.model.quantization import SpinOperator
from manybody.quantum.ladder import NOISE, ladder_terms


@dataclass(frozen=True)
class Frame:
    """op: the operator turned by rotations (N, 3, 3): vectors of the original frame are n = R_i^T n', spins likewise.

    conserved: total S^z of the turned operator is conserved; axis (3,) is that axis in the original frame (NaN
    otherwise).
    isotropic: the original operator is symmetric under all common rotations. mirrored: every energy of sector M is
    one of sector -M. real: the matrix is real.
    """

    op: SpinOperator
    rotations: np.ndarray
    axis: np.ndarray
    conserved: bool
    isotropic: bool
    mirrored: bool
    real: bool


def natural_frame(op: SpinOperator) -> Frame:
    """Turn an operator so that a conserved total spin component is S^z and its matrix is real, where that can be
    had.
    """
    axes = op.symmetry_axes()
    conserved, isotropic = len(axes) > 0, len(axes) == 3
    rotations = np.broadcast_to(np.eye(3), (op.sites, 3, 3))
    axis = np.array([0.0, 0.0, 1.0]) if isotropic else (axes[0] if conserved else np.full(3, np.nan))
    turned = op
    if conserved and not isotropic and abs(axis[2]) < 1.0:
        rotations = np.broadcast_to(rotation_between(axis, np.array([0.0, 0.0, 1.0])), (op.sites, 3, 3))
        turned = op.rotated(rotations[0])
    real = is_real(turned)
    if not real:
        for candidate in _gauges(turned) if conserved else _mirrors(turned):
            attempt = turned.rotated(candidate)
            if is_real(attempt):
                turned, real = attempt, True
                rotations = np.broadcast_to(candidate, (op.sites, 3, 3)) @ rotations
                break
    # A half turn about x maps sector M to -M; so does the reversal of all vectors (time reversal).
    mirrored = conserved and (
        all(sum(group.ranks) % 2 == 0 for group in turned.symbol.groups)
        or turned.symbol.rotated(np.diag([1.0, -1.0, -1.0])).allclose(turned.symbol)
    )
    return Frame(turned, np.array(rotations), axis, conserved, isotropic, mirrored, real)


def is_real(op: SpinOperator) -> bool:
    """Whether the matrix in the S^z basis is real: an even number of factors with q < 0 in every term."""
    largest = imaginary = 0.0
    for *_, coefficients in ladder_terms(op):
        largest = max(largest, float(np.abs(coefficients).max()))
        imaginary = max(imaginary, float(np.abs(coefficients.imag).max()))
    return imaginary <= NOISE * largest


def rotation_between(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """The proper rotation (3, 3) of least angle with R a = b, for unit vectors; a half turn for opposite ones."""
    v, c = np.cross(a, b), float(a @ b)
    if c < -1 + 1e-12:
        helper = np.eye(3)[np.argmin(np.abs(a))]
        u = np.cross(a, helper)
        u /= np.linalg.norm(u)
        return 2 * np.outer(u, u) - np.eye(3)
    cross = np.array([[0, -v[2], v[1]], [v[2], 0, -v[0]], [-v[1], v[0], 0]])
    return np.eye(3) + cross + cross @ cross / (1 + c)


def _gauges(op: SpinOperator):
    """Angles about z, one per site, that make the ladder coefficients real along a spanning tree of the pairs."""
    links: dict[int, list[tuple[int, float]]] = {}
    for _, steps, sites, coefficients in ladder_terms(op):
        if steps != (1, -1):
            continue
        # Turning site i by p multiplies a step q_i by exp(-i q_i p): real along (i, j) once p_i - p_j = arg c.
        for (i, j), angle, size in zip(sites.tolist(), np.angle(coefficients), np.abs(coefficients), strict=True):
            if size > 0:
                links.setdefault(i, []).append((j, -angle))
                links.setdefault(j, []).append((i, angle))
    angles = np.full(op.sites, np.nan)
    for root in range(op.sites):
        if not np.isnan(angles[root]):
            continue
        angles[root] = 0.0
        queue = deque([root])
        while queue:
            i = queue.popleft()
            for j, difference in links.get(i, []):
                if np.isnan(angles[j]):
                    angles[j] = angles[i] + difference
                    queue.append(j)
    cosine, sine = np.cos(angles), np.sin(angles)
    rotations = np.zeros((op.sites, 3, 3))
    rotations[:, 0, 0] = rotations[:, 1, 1] = cosine
    rotations[:, 0, 1], rotations[:, 1, 0] = -sine, sine
    rotations[:, 2, 2] = 1.0
    yield rotations


def _mirrors(op: SpinOperator):
    """Rotations that bring a possible mirror normal to y.

    Reflection in a plane keeps the symbol only if its normal is an eigenvector of every symmetric tensor of the symbol,
    orthogonal to (or along) every vector: the eigenvectors of one random combination are the candidates.
    """
    random = np.random.default_rng(0)
    total = np.zeros((3, 3))
    for group in op.symbol.rescaled()[0].groups:  # products of two huge coefficients would overflow
        if group.ranks == (1,):
            for vector in group.coefficients[:, np.argsort(CARTESIAN)]:
                total += random.normal() * np.outer(vector, vector)
        elif group.ranks == (2,):
            for coefficients in group.coefficients:
                total += random.normal() * _second_rank_tensor(coefficients)
        elif group.ranks == (1, 1):
            order = np.argsort(CARTESIAN)
            for matrix in group.coefficients[:, order[:, None], order]:
                axial = np.array(
                    [matrix[1, 2] - matrix[2, 1], matrix[2, 0] - matrix[0, 2], matrix[0, 1] - matrix[1, 0]]
                )
                total += random.normal() * (matrix + matrix.T) + random.normal() * np.outer(axial, axial)
    for normal in np.linalg.eigh(total)[1].T:
        yield rotation_between(normal, np.array([0.0, 1.0, 0.0]))


def _second_rank_tensor(coefficients: np.ndarray) -> np.ndarray:
    """The symmetric traceless matrix M with sum_q c_q C_2q(n) = n^T M n."""
    unit = np.eye(3)

    def form(n):
        return harmonics(2, n) @ coefficients

    return np.array([[(form(a + b) - form(a) - form(b)) / 2 for b in unit] for a in unit])

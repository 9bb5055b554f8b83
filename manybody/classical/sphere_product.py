"""The product of N unit spheres: points, tangent frames, projection and retraction.

Every array carries the batch in front: a configuration has shape (..., N, 3), a tangent vector at it the same shape
with each (3,) row orthogonal to the row of the configuration.
"""

import numpy as np


def random_points(generator: np.random.Generator, sites: int, batch: tuple[int, ...] = ()) -> np.ndarray:
    """Uniformly distributed unit vectors, shape (*batch, sites, 3)."""
    return normalized(generator.standard_normal((*batch, sites, 3)))


def normalized(x: np.ndarray, fallback: np.ndarray | None = None) -> np.ndarray:
    """Rows of x (..., 3) scaled to unit length; a row of length zero becomes the row of `fallback`, or the z axis."""
    x = np.asarray(x, dtype=float)
    # scaling by the largest component first keeps rows of 1e-200 or 1e200 from vanishing or overflowing in the square
    largest = np.max(np.abs(x), axis=-1, keepdims=True)
    y = x / np.where(largest > 0, largest, 1.0)
    length = np.linalg.norm(y, axis=-1, keepdims=True)
    if np.all(length > 0):
        return y / length
    replacement = np.broadcast_to(np.array([0.0, 0.0, 1.0]) if fallback is None else fallback, x.shape)
    return np.where(length > 0, y / np.where(length > 0, length, 1.0), replacement)


def project(n: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Tangential part of v at n, both (..., N, 3)."""
    return v - np.sum(n * v, axis=-1, keepdims=True) * n


def retract(n: np.ndarray, v: np.ndarray) -> np.ndarray:
    """(n + v) / |n + v| row by row: agrees with the exponential map of a tangent v up to third order in v."""
    return normalized(n + v, fallback=n)


def tangent_frames(n: np.ndarray, normal: np.ndarray | None = None) -> tuple[np.ndarray, np.ndarray]:
    """Orthonormal tangent vectors (e1, e2) with e2 = n x e1, so that (e1, e2, n) is right-handed; all (..., N, 3).

    Without `normal`, e1 is built from the coordinate axis farthest from n. With a unit vector `normal` (3,), orthogonal
    to all rows of n (a coplanar configuration), e1 is that vector: then e2 lies in the plane, and out-of-plane motion
    is the first coordinate.
    """
    n = np.asarray(n, dtype=float)
    if normal is None:
        axis = np.zeros_like(n)
        np.put_along_axis(axis, np.argmin(np.abs(n), axis=-1)[..., None], 1.0, axis=-1)
    else:
        axis = np.broadcast_to(np.asarray(normal, dtype=float), n.shape)
    e1 = normalized(project(n, axis))
    return e1, np.cross(n, e1)

"""Geometry of the product of spheres."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from manybody.classical.sphere_product import normalized, project, random_points, retract, tangent_frames

seeds = st.integers(0, 2**32 - 1)


@given(seeds)
def test_frames_are_right_handed_and_orthonormal(seed):
    n = random_points(np.random.default_rng(seed), 5, (3,))
    e1, e2 = tangent_frames(n)
    frame = np.stack([e1, e2, n], axis=-1)
    assert np.allclose(np.swapaxes(frame, -1, -2) @ frame, np.eye(3), atol=1e-14)
    assert np.allclose(np.linalg.det(frame), 1.0, atol=1e-14)


def test_frames_follow_the_common_normal():
    angle = np.linspace(0, 5, 7)
    n = np.stack([np.cos(angle), np.sin(angle), np.zeros(7)], axis=1)
    e1, e2 = tangent_frames(n, np.array([0.0, 0.0, 1.0]))
    assert np.array_equal(e1, np.tile([0.0, 0.0, 1.0], (7, 1)))
    assert np.allclose(e2[:, 2], 0.0)


@given(seeds)
def test_projection_is_tangent_and_idempotent(seed):
    generator = np.random.default_rng(seed)
    n, v = random_points(generator, 4), generator.standard_normal((4, 3))
    once = project(n, v)
    assert np.allclose(np.sum(n * once, axis=-1), 0.0, atol=1e-14)
    assert np.allclose(project(n, once), once, atol=1e-14)


@pytest.mark.parametrize("step", [1e-2, 1e-3])
def test_retraction_agrees_with_the_great_circle_to_third_order(step):
    generator = np.random.default_rng(1)
    n = random_points(generator, 50)
    v = step * normalized(project(n, generator.standard_normal(n.shape)))
    geodesic = np.cos(step) * n + np.sin(step) * v / step
    deviation = np.linalg.norm(retract(n, v) - geodesic, axis=1).max()
    # atan(step) - step = - step^3 / 3 + ...
    assert deviation == pytest.approx(step**3 / 3, rel=1e-3)


def test_rows_of_any_size_are_normalized():
    assert np.allclose(
        normalized(np.array([[3e-200, 4e-200, 0.0], [0.0, 3e200, 4e200]])), [[0.6, 0.8, 0], [0, 0.6, 0.8]]
    )
    assert np.array_equal(normalized(np.zeros(3)), [0.0, 0.0, 1.0])
    assert np.array_equal(normalized(np.zeros((1, 3)), fallback=np.array([[1.0, 0, 0]])), [[1.0, 0, 0]])


def test_random_points_are_uniform_and_seeded():
    n = random_points(np.random.default_rng(3), 200_000)
    # first and second moments of the uniform distribution: 0 and 1/3
    assert np.abs(n.mean(axis=0)).max() < 5e-3
    assert np.allclose(n.T @ n / len(n), np.eye(3) / 3, atol=5e-3)
    assert np.array_equal(n, random_points(np.random.default_rng(3), 200_000))

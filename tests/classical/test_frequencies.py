"""Symplectic frequencies of one configuration."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from manybody.classical import frequencies as module
from manybody.classical.frequencies import HarmonicTrouble, TooLarge, UnstablePoint, fluctuations
from manybody.classical.minimize import MinimizeSettings, minimize
from manybody.classical.sphere_product import random_points, tangent_frames
from manybody.model import lattice as lattices
from manybody.model.couplings import anisotropy, biquadratic, exchange, field
from manybody.model.energy import EnergyFunction

seeds = st.integers(0, 2**32 - 1)
PAIRS = [[0, 1], [1, 2], [2, 3], [0, 3], [0, 2]]


def gapped(seed):
    """Random anisotropic exchange with fields and a biquadratic term: no zero modes."""
    generator = np.random.default_rng(seed)
    f = exchange(4, PAIRS, generator.standard_normal((5, 3, 3))) + field(4, range(4), generator.standard_normal((4, 3)))
    return f + biquadratic(4, PAIRS, 0.3 * generator.standard_normal(5))


def boson_frequencies(f, n):
    """Quadratic bosons diagonalized with numpy alone, by the Cholesky form of the para-unitary problem (Colpa 1978,
    Physica A 93, 327).

    n + sqrt(2) Re[(e1 - i e2) b] to first order makes f = const + 1/2 (b*, b) G (b, b*)^T; the frequencies are the
    eigenvalues of K g K^T with G = K^T K and g = diag(1, -1), divided by two pairs.
    """
    sites = len(n)
    e1, e2 = tangent_frames(n)
    columns = np.zeros((3 * sites, 2 * sites), dtype=complex)
    for i in range(sites):
        m = (e1[i] + 1j * e2[i]) / np.sqrt(2)
        columns[3 * i : 3 * i + 3, i] = m
        columns[3 * i : 3 * i + 3, sites + i] = m.conj()
    g = columns.conj().T @ f.hessian(n) @ columns
    lower = np.linalg.cholesky(g)
    metric = np.diag(np.r_[np.ones(sites), -np.ones(sites)])
    return np.sort(np.linalg.eigvalsh(lower.conj().T @ metric @ lower))[sites:]


@settings(max_examples=12, deadline=None)
@given(seeds)
def test_frequencies_equal_a_boson_diagonalization(seed):
    f = gapped(seed)
    n = minimize(f, MinimizeSettings(starts=16)).configuration
    found = fluctuations(f, n)
    assert np.allclose(found.frequencies, boson_frequencies(f, n), rtol=1e-7, atol=1e-9)
    assert found.zero_modes == 0
    assert found.trace == pytest.approx(np.trace(f.hessian(n)), rel=1e-12)


@settings(max_examples=6, deadline=None)
@given(seeds)
def test_frequencies_do_not_depend_on_the_frame(seed):
    f = gapped(seed)
    n = minimize(f, MinimizeSettings(starts=16)).configuration
    turn = Rotation.random(4, np.random.default_rng(seed)).as_matrix()
    turned = fluctuations(f.rotated(turn), np.einsum("iab,ib->ia", turn, n))
    assert np.allclose(turned.frequencies, fluctuations(f, n).frequencies, rtol=1e-7, atol=1e-10)


def test_separated_and_joint_motion_agree(monkeypatch):
    """A ring in its plane, treated by halves and as a whole."""
    f = exchange(7, lattices.ring(7).pairs("nearest"), 1.0)
    n = minimize(f).configuration
    halves = fluctuations(f, n)
    monkeypatch.setattr(module, "_common_normal", lambda n: None)
    whole = fluctuations(f, n @ Rotation.random(None, np.random.default_rng(0)).as_matrix())
    assert np.allclose(halves.frequencies, whole.frequencies, atol=1e-9)
    assert halves.zero_modes == whole.zero_modes == 3


def test_single_vector_precesses_with_its_field():
    f = field(1, [0], [0, 3.0, 4.0])
    assert fluctuations(f, np.array([[0, 0.6, 0.8]])).frequencies == pytest.approx([5.0])
    # easy plane, K n_z^2: at n = x one stiff and one free direction, frequency zero
    plane = fluctuations(anisotropy(1, [0], [0, 0, 1], 1.0), np.array([[1.0, 0, 0]]))
    assert plane.zero_modes == 1
    assert len(plane.flat) == 1


def test_scaling_and_uncoupled_sites():
    f = exchange(5, [[0, 1], [1, 2]], 1.0)
    n = np.array([[0, 0, 1.0], [0, 0, -1], [0, 0, 1], [1, 0, 0], [0, 1, 0]])
    small, large = fluctuations(f, n), fluctuations(1e300 * f, n)
    assert np.allclose(large.frequencies / 1e300, small.frequencies)
    assert large.trace / 1e300 == pytest.approx(small.trace)
    assert small.zero_modes == 2 + 1
    assert fluctuations(EnergyFunction(3, 1.0), random_points(np.random.default_rng(0), 3)).zero_modes == 3


def test_what_is_no_minimum_is_an_error():
    f = exchange(4, lattices.ring(4).pairs("nearest"), 1.0)
    up = np.tile([0.0, 0.0, 1.0], (4, 1))
    with pytest.raises(UnstablePoint, match="not a minimum"):
        fluctuations(f, up)
    with pytest.raises(UnstablePoint, match="not stationary"):
        fluctuations(f, random_points(np.random.default_rng(0), 4))
    with pytest.raises(ValueError, match="configuration must have shape"):
        fluctuations(f, up[:3])
    assert issubclass(UnstablePoint, HarmonicTrouble)


def test_too_large_says_so(monkeypatch):
    monkeypatch.setattr(module, "SPLIT_SITES", 3)
    f = exchange(4, lattices.ring(4).pairs("nearest"), -1.0)
    with pytest.raises(TooLarge, match="at most 3"):
        fluctuations(f, np.tile([0.0, 0.0, 1.0], (4, 1)))


def test_unknown_rule():
    f = field(1, [0], [0, 0, 1.0])
    n = np.array([[0, 0, 1.0]])
    with pytest.raises(ValueError, match="rule must be one of"):
        fluctuations(f, n).e1(f, n, "bosons")

"""Limits of many sites against exact and published ones; rows are those of data/reference_values.csv."""

import numpy as np
import pytest
from reference import reference
from solvable import (
    heisenberg,
    ising_chain,
    ising_limit,
    ising_ring,
    ring_pairs,
    tilted_square,
    xx_chain,
    xxz_ring,
)

from manybody.results.scaling_sites import extrapolate, forms_for

WINDOWS = ((4, 6, 8), (4, 8, 12, 16), (4, 6, 8, 10, 12), (6, 8, 10, 12, 14, 16), (8, 16, 24, 32, 40), (8, 16, 32, 64))


def limit(sites, energies, error=0.0, **geometry):
    sites = np.array(sites, float)
    families = {f"{q},{r}": sites % q == r for q in (2, 3) for r in range(q)}
    return extrapolate(sites, np.array(energies), np.full(len(sites), error), {}, families=families, **geometry)


def judged(found, truth, useful):
    """Within two stated standard errors, and those no larger than asked."""
    deviation = abs(found.values["energy"] - truth)
    assert deviation <= 2 * found.errors["energy"], (deviation, found)
    assert found.errors["energy"] <= useful, found


def test_bethe_ansatz_agrees_with_the_reference_values():
    """The energies that these tests extrapolate: rows A036, A214, A210."""
    assert xxz_ring(256) == pytest.approx(reference("A036").value, abs=1e-9)
    assert xxz_ring(16, 2.0) == pytest.approx(reference("A214").value, abs=1e-9)
    assert xxz_ring(12, 0.5) == pytest.approx(reference("A210").value, abs=1e-9)
    assert xx_chain(64) == pytest.approx(reference("A206").value, abs=1e-9)


def test_half_spin_chain_from_rings():
    """1/4 - ln 2 (row B001) to 1e-5, from rings up to 64 and up to 16 sites."""
    truth = reference("B001").value
    for sites, useful in (((16, 32, 64, 128, 256), 1e-6), ((8, 16, 24, 32, 48, 64), 1e-5), (range(4, 18, 2), 1e-4)):
        found = limit(sites, [xxz_ring(n) for n in sites], boundary="periodic", dimension=1)
        judged(found, truth, useful)
        assert abs(found.values["energy"] - truth) < 1e-5


@pytest.mark.parametrize(("anisotropy", "row"), [(0.5, "B007"), (2.0, "B010")])
def test_xxz_chain_from_rings(anisotropy, row):
    """Yang and Yang 1966; critical for 0.5, with a gap for 2."""
    sites = (8, 12, 16, 24, 32, 48)
    found = limit(sites, [xxz_ring(n, anisotropy) for n in sites], boundary="periodic", dimension=1)
    judged(found, reference(row).value, 5e-5)


@pytest.mark.parametrize(("field", "row"), [(1.0, "B018"), (0.5, "B019")])
def test_transverse_field_ising_chain(field, row):
    """Pfeuty 1970, from open chains and from rings."""
    sites = (8, 12, 16, 24, 32, 48)
    truth = reference(row).value
    assert ising_limit(field) == pytest.approx(truth, abs=1e-9)
    judged(limit(sites, [ising_ring(n, field) for n in sites], boundary="periodic", dimension=1), truth, 1e-5)
    judged(limit(sites, [ising_chain(n, field) for n in sites], boundary="open", dimension=1), truth, 1e-4)


def test_square_lattice_from_small_tori():
    """-0.669437(5) (row B023, from memory), from tori of 8 to 20 sites: a wide error, but not a wrong one."""
    energies = {8: -6.0, 10: reference("A234").value, 16: reference("A230").value, 20: reference("A236").value}
    sites, pairs = tilted_square((3, 3), (-3, 3))
    energies[sites] = heisenberg(0.5, pairs, sites)
    truth = reference("B023").value
    for chosen in ((8, 10, 16, 18, 20), (10, 16, 18, 20), (10, 16, 20)):
        found = limit(chosen, [energies[n] for n in chosen], boundary="periodic", dimension=2)
        judged(found, truth, 0.05)


def test_spin_one_chain_from_rings():
    """-1.401484039 (row B002, from memory), from rings of 4 to 10 sites by exact diagonalization."""
    sites = (4, 6, 8, 10)
    energies = [heisenberg(1, ring_pairs(n), n) for n in sites]
    judged(limit(sites, energies, boundary="periodic", dimension=1), reference("B002").value, 0.05)


def open_chain_energies(spin, sizes, accuracy):
    """Open Heisenberg chains by the matrix-product engine, with spin operators."""
    from manybody.model.couplings import exchange
    from manybody.model.quantization import quantize
    from manybody.quantum.ground_state import ground_state
    from manybody.quantum.result import QuantumSettings

    energies, errors = [], []
    for sites in sizes:
        pairs = np.stack([np.arange(sites - 1), np.arange(1, sites)], axis=1)
        start = np.zeros((sites, 3))
        start[:, 2] = (-1.0) ** np.arange(sites)
        operator = quantize(exchange(sites, pairs, 1.0), spin, "wick")
        found = ground_state(operator, QuantumSettings(accuracy=accuracy, max_bond=400), start, sites - 1.0)
        energies.append(found.energy * spin**2)
        errors.append(found.error * spin**2)
    return np.array(energies), np.array(errors)


@pytest.mark.slow
def test_spin_one_chain_from_large_open_chains():
    """-1.401484039 (row B002) to 1e-5, from open chains up to 64 sites with their nearly free end spins."""
    sizes = (12, 16, 20, 24, 28, 32, 40, 48, 56, 64)
    energies, errors = open_chain_energies(1.0, sizes, 1e-9)
    found = extrapolate(np.array(sizes, float), energies, errors, boundary="open", dimension=1)
    judged(found, reference("B002").value, 2e-5)
    assert abs(found.values["energy"] - reference("B002").value) < 1e-5


@pytest.mark.slow
def test_spin_three_halves_chain_from_large_open_chains():
    """-2.82833(1) (Hallberg, Wang, Horsch, Moreo 1996, from memory) to 1e-4: a critical chain with end spins.

    Known weakness, measured: the crossover is slow, and other windows understate their error. Sizes 6 to 24 miss by
    1.2e-4 at a stated 2.4e-5, sizes 6 to 40 by 8.4e-5 at 3.0e-5. This window passes at two standard errors, not at one.
    """
    sizes = (12, 16, 20, 24, 32, 40)
    energies, errors = open_chain_energies(1.5, sizes, 1e-8)
    found = extrapolate(np.array(sizes, float), energies, errors, boundary="open", dimension=1)
    judged(found, -2.82833, 2e-4)
    assert abs(found.values["energy"] + 2.82833) < 1e-4


def bank():
    for window in WINDOWS:
        for anisotropy, row in ((1.0, "B001"), (0.5, "B007"), (2.0, "B010")):
            yield window, [xxz_ring(n, anisotropy) for n in window], reference(row).value, "periodic"
        for field in (0.3, 0.5, 0.8, 0.95, 1.0, 1.05, 1.5):
            yield window, [ising_ring(n, field) for n in window], ising_limit(field), "periodic"
            yield window, [ising_chain(n, field) for n in window], ising_limit(field), "open"
        yield window, [xx_chain(n) for n in window], reference("B006").value, "open"


@pytest.mark.parametrize("known", [True, False])
def test_stated_errors_are_honest_and_useful(known):
    """Over chains with exact limits, critical, near-critical and gapped: 95 of 100 within two errors, not padded."""
    ratios, padding = [], []
    for window, energies, truth, boundary in bank():
        geometry = {"boundary": boundary, "dimension": 1} if known else {}
        found = limit(window, energies, **geometry)
        ratio = abs(found.values["energy"] - truth) / found.errors["energy"]
        ratios.append(ratio)
        if len(window) > 3:
            padding.append(1 / max(ratio, 1e-6))
    assert len(ratios) == 108
    assert np.mean(np.array(ratios) < 2) > 0.95
    assert np.median(padding) < (10 if known else 15)


def test_gap_limit_is_the_difference_of_the_limits():
    sites = np.array([4.0, 6, 8, 10, 12])
    quantum = np.array([xxz_ring(int(n)) for n in sites])
    classical = -sites * np.cos(np.pi / sites**2) / 4
    error = np.full(5, 1e-6)
    found = extrapolate(sites, quantum, error, {"classical": classical, "gap": quantum - classical}, "periodic", 1)
    assert found.values["gap"] == pytest.approx(found.values["energy"] - found.values["classical"], abs=1e-13)
    assert found.errors["gap"] > 0


def test_constant_energies_per_site_have_a_limit_without_error():
    """Majumdar-Ghosh rings: -3/8 per site at every even size (row B012)."""
    sites = np.array([6.0, 8, 10, 14])
    truth = reference("B012").value
    found = extrapolate(sites, truth * sites, np.zeros(4), {}, "periodic", 1)
    assert found.values["energy"] == pytest.approx(truth, abs=1e-9) and found.errors["energy"] < 1e-8


def test_even_and_odd_rings_are_not_mixed():
    sizes = range(3, 15)
    energies = [heisenberg(0.5, ring_pairs(n), n) for n in sizes]
    found = limit(sizes, energies, boundary="periodic", dimension=1)
    assert found.family in ("2,0", "2,1") and all(n % 2 == found.sizes[0] % 2 for n in found.sizes)
    judged(found, reference("B001").value, 1e-3)


def test_errors_of_the_energies_are_propagated():
    sites = np.array([8.0, 16, 24, 32, 40])
    energies = np.array([xxz_ring(int(n)) for n in sites])
    small, large = (extrapolate(sites, energies, np.full(5, e) * sites, {}, "periodic", 1) for e in (1e-9, 1e-3))
    assert large.errors["energy"] > 3e-4 > small.errors["energy"]


def test_fewer_than_three_sizes_have_no_limit():
    assert extrapolate([4, 6], [-2.0, -2.8], [0, 0]) is None
    assert extrapolate([4, 6, 8], [-2.0, -2.8, np.nan], [0, 0, 0]) is None


def test_forms_follow_the_geometry():
    assert {f.powers[0] for f in forms_for("open", 2)} == {0}
    assert any(0.5 in f.powers for f in forms_for("open", 2)) and not any(0.5 in f.powers for f in forms_for("open", 1))
    assert set(forms_for("periodic", 1)) < set(forms_for())

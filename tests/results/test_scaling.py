import numpy as np
import pytest
import xarray as xr
from solvable import ATTRS, ring_records, xxz_ring

from manybody.results import scaling
from manybody.results.dataset import flag_words, open_results, records_to_tree, write_results


@pytest.fixture(scope="module")
def tree(tmp_path_factory):
    path = tmp_path_factory.mktemp("scaling") / "results.nc"
    write_results(path, ring_records((3, 4, 5, 6, 8), (0.5, 1.0, 1.5, 2.0)[:3]), ATTRS)
    return open_results(path)


def test_first_coefficient_is_the_harmonic_one(tree):
    fits = scaling.spin_fits(tree)
    known = tree["harmonic_coefficient"].isel(spin=0)
    xr.testing.assert_allclose(
        fits["spin_coefficient"].sel(power=1, parity="integer", drop=True).rename("x"),
        known.drop_vars("spin").rename("x"),
    )
    assert (flag_words(fits["first_source"]) == "harmonic").all()


def test_units_and_names_are_kept(tree):
    fits = tree["scaling"].dataset
    for name in ("gap_fit", "limit_gap", "limit_gap_error", "spin_coefficient"):
        assert fits[name].attrs["units"] == "meV" and fits[name].attrs["long_name"]
    assert fits["spin_covariance"].attrs["units"] == "meV2"
    assert fits["limit_relative_gap"].attrs["units"] == "1"


def test_gap_limit_is_quantum_minus_classical_limit(tree):
    fits = tree["scaling"].dataset
    difference = (fits["limit_energy"] - fits["limit_classical"]).values
    np.testing.assert_allclose(fits["limit_gap"].values, difference, atol=1e-12)
    # even rings: classical energy -1 per site; the odd ones are another family
    assert fits["limit_family"].sel(spin=0.5, rule="wick").item() == "sites = 0 modulo 2"
    np.testing.assert_allclose(fits["limit_classical"].sel(spin=0.5), -1, atol=1e-9)


def test_trust_grows_with_strictness_and_names_the_spread_between_rules(tree):
    verdict = scaling.trust_spin(tree, [0.1, 0.05, 0.01])
    value = verdict["trust_spin"].transpose("within", ...).values
    assert np.all(np.diff(value, axis=0) >= 0)
    spread = verdict["trust_spin"].max("rule") - verdict["trust_spin"].min("rule")
    np.testing.assert_array_equal(verdict["trust_spin_spread"], spread)
    single = scaling.trust_spin(tree, 0.05)
    assert "within" not in single.dims
    xr.testing.assert_equal(single["trust_spin"], verdict["trust_spin"].sel(within=0.05))


def test_trust_spin_of_the_triangle_is_exact(tree):
    """wick: gap/1.5 = 1/S for integer S, 1/S - 1/(4 S^2) for half-integer S: within 5 % from S = 20 on, 39/2 is not."""
    verdict = scaling.trust_spin(tree, 0.05).sel(sites=3, rule="wick")
    assert float(verdict["trust_spin"]) == 20.0
    assert str(flag_words(verdict["trust_state"])) == "extrapolated"


def test_rule_spread_is_the_largest_difference(tree):
    spread = scaling.rule_spread(tree)
    gaps = tree["relative_gap"].sel(sites=4, spin=0.5).values
    assert float(spread.sel(sites=4, spin=0.5)) == pytest.approx(np.ptp(gaps))


def test_limit_of_many_sites_has_its_own_verdict():
    """Spin-wave theory (Anderson 1952): |gap| = 0.36338/S + 0.0330/S^2 per site (rows C001 and G001): S = 15/2. From
    three sizes it is known to half a unit, and the range says so."""
    records = ring_records((4, 6, 8), (0.5, 1.0, 1.5), rules=("wick",))
    tree = records_to_tree(records)
    verdict = scaling.trust_spin_limit(tree, 0.05).sel(rule="wick")
    assert abs(float(verdict["limit_trust_spin"]) - 7.5) <= 0.5
    assert 6.5 <= float(verdict["limit_trust_spin_low"]) <= 7.5 <= float(verdict["limit_trust_spin_high"]) <= 8.5
    # without the harmonic result e_1 is fitted from the gaps, and less certain
    for record in records:
        del record["harmonic_coefficient"]
    alone = scaling.trust_spin_limit(records_to_tree(records), 0.05).sel(rule="wick")
    assert scaling.harmonic_limits(records_to_tree(records)) is None
    assert 6 < float(alone["limit_trust_spin"]) < 10

    def width(one):
        return float(one["limit_trust_spin_high"] - one["limit_trust_spin_low"])

    assert width(alone) > width(verdict)


def test_first_correction_has_a_limit_of_many_sites():
    """2/pi - 1 per site under wick (Anderson 1952), 2 more under toeplitz (both traces: 4 kappa N = N each)."""
    sizes = (4, 6, 8, 10, 12)
    tree = records_to_tree(ring_records(sizes, (0.5,), energies={(n, 0.5): xxz_ring(n) for n in sizes}))
    found = scaling.harmonic_limits(tree)
    for rule, truth in (("wick", 2 / np.pi - 1), ("toeplitz", 2 / np.pi + 1)):
        one = found.sel(rule=rule)
        error = float(one["limit_first_error"])
        assert abs(float(one["limit_first"]) - truth) < error < 1e-3
    assert found["limit_first"].attrs["units"] == tree["gap"].attrs["units"]
    assert scaling.harmonic_limits(records_to_tree(ring_records((4, 6), (0.5, 1.0)))) is None


@pytest.mark.parametrize(
    ("sizes", "spins", "missing"),
    [((4,), (0.5,), {"spin_coefficient", "limit_gap", "trust_spin"}), ((4, 6), (0.5, 1.0), {"limit_gap"})],
)
def test_what_cannot_be_fitted_is_left_out(sizes, spins, missing):
    fits = scaling.scaling_dataset(records_to_tree(ring_records(sizes, spins)))
    assert not missing & set(fits.data_vars)


def test_failed_and_unconverged_points():
    records = ring_records((4, 6, 8), (0.5, 1.0, 1.5), rules=("wick",))
    for record in records:
        if record["sites"] == 6 and record["spin"] == 1.0:
            record.update(status="failed", message="worker lost")
            for name in ("quantum_energy", "quantum_energy_error"):
                del record[name]
        if record["sites"] == 8 and record["spin"] == 1.5:
            record.update(status="not_converged", quantum_energy_error=4.0)
    fine = scaling.site_limits(records_to_tree(ring_records((4, 6, 8), (1.5,), rules=("wick",))))
    fits = scaling.scaling_dataset(records_to_tree(records))
    assert fits["spin_points"].sel(sites=6, rule="wick") == 2
    assert np.isnan(fits["limit_gap"].sel(spin=1.0, rule="wick"))
    # the unconverged one counts with its error
    assert float(fits["limit_gap_error"].sel(spin=1.5).item()) > 2 * float(fine["limit_gap_error"].item())


def test_points_that_violate_the_ladder_are_not_fitted():
    records = ring_records((4, 6, 8), (0.5, 1.0, 1.5))
    whole = scaling.site_limits(records_to_tree(records, ATTRS))
    for record in records:
        if record["sites"] == 8 and record["spin"] == 1.0:
            record["quantum_energy"] += 5.0
            record["upper_symbol_energy"] = record["quantum_energy"] + 1.0
    broken = records_to_tree(records, ATTRS)
    assert (flag_words(broken["ladder"].sel(sites=8, spin=1.0)) == "violated").all()
    rest = scaling.site_limits(broken)
    xr.testing.assert_equal(rest["limit_energy"].sel(spin=0.5), whole["limit_energy"].sel(spin=0.5))
    # two sizes are left
    assert not np.isfinite(rest["limit_energy"].sel(spin=1.0)).any()


def test_energies_without_an_error_are_not_fitted():
    records = ring_records((4, 6, 8), (0.5, 1.0), rules=("wick",))
    for record in records:
        del record["quantum_energy_error"]
    assert not scaling.scaling_dataset(records_to_tree(records)).get("trust_spin", xr.DataArray(np.nan)).notnull().any()


def test_parameters_and_lattices_are_fitted_one_by_one():
    records = []
    for name, factor in (("weak", 1.0), ("strong", 3.0)):
        for record in ring_records((4, 6), (0.5, 1.0), rules=("wick",)):
            scaled = {k: v * factor for k, v in record.items() if k.endswith("energy") or k == "harmonic_coefficient"}
            records.append(record | scaled | {"lattice": name, "parameters": {"d": factor}})
    fits = scaling.spin_fits(records_to_tree(records))
    first = fits["spin_coefficient"].sel(power=1, parity="integer", rule="wick", sites=4)
    assert float(first.sel(lattice="weak", d=1.0)) == pytest.approx(-2, abs=1e-6)
    assert float(first.sel(lattice="strong", d=3.0)) == pytest.approx(-6, abs=1e-6)
    assert np.isnan(first.sel(lattice="weak", d=3.0))

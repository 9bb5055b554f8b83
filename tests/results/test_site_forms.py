import numpy as np
import pytest

from manybody.results.site_forms import forms_for

SIZES = (4, 6, 8, 12)


def powers(boundary, dimension):
    return {form.power / form.dimension for form in forms_for(SIZES, boundary, dimension) if form.kind == "slow"}


def test_leading_powers_follow_the_geometry():
    """1/N^2 for chains; tori of linear size L: 1/L^(d+1) (sources in site_forms.py); edges: after 1/L, 1/L^2."""
    assert powers("periodic", 1) == powers("open", 1) == {2}
    assert powers("periodic", 2) == {1.5} and powers("periodic", 3) == {4 / 3}
    assert powers("open", 2) == {1} and powers("open", 3) == {2 / 3}


def test_without_a_geometry_every_one_is_tried():
    everything = set(forms_for(SIZES))
    for boundary in ("open", "periodic"):
        for dimension in (1, 2, 3):
            assert set(forms_for(SIZES, boundary, dimension)) < everything
    assert {form.dimension for form in forms_for(SIZES, None, 2)} == {2}


def test_only_open_boundaries_have_a_boundary_term():
    for form in forms_for(SIZES):
        columns = form.fixed(np.array([2.0, 4.0]), 2.0)
        assert columns.shape == (2, form.width) and form.width == (2 if form.boundary == "open" else 1)
        np.testing.assert_array_equal(columns[:, 0], 1)
        if form.boundary == "open":
            np.testing.assert_allclose(columns[:, 1], [1, 0.5])


@pytest.mark.parametrize("form", {form.kind: form for form in forms_for(SIZES)}.values(), ids=lambda form: form.kind)
def test_random_columns_and_covariance_are_the_same_function(form):
    x = np.array(SIZES, float)
    columns = form.random(x, 4.0)
    np.testing.assert_allclose(form.covariance(x, x, 4.0), columns @ columns.T, atol=1e-10)


def test_every_rest_vanishes_for_many_sites():
    x = np.array([4.0, 1e12])
    for form in forms_for(SIZES):
        variance = np.diag(form.covariance(x, x, 4.0))
        assert variance[1] < 1e-15 * variance[0], form


def test_names_say_what_is_fitted():
    names = {form.name for form in forms_for(SIZES, "open", 1)}
    assert {"1/N + slowly varying 1/N^2", "1/N + 1/N^2 + varying 1/N^3", "1/N + exponential"} < names
    assert "1/N^(3/2) + varying 1/N^2" in {form.name for form in forms_for(SIZES, "periodic", 2)}

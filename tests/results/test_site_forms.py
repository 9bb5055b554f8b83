import numpy as np
import pytest

from manybody.results.site_forms import forms_for, similar_shapes

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
    assert "1/N + 1/N^2 + varying 1/N^(5/4)" in names


def test_clusters_of_one_shape_have_the_same_multiple_of_a_power():
    """Squares L^2, the tilted ones 2 L^2, kagome rhombi 3 L^2, cubes; 10, 16 and 20 are tori of three shapes."""
    for sizes, dimension in (((4, 16, 36), 2), ((8, 18, 32), 2), ((12, 27, 48), 2), ((8, 27, 64), 3)):
        assert similar_shapes(sizes, dimension)
    for sizes, dimension in (((10, 16, 20), 2), ((4, 6, 12), 2), ((8, 16, 27), 3)):
        assert not similar_shapes(sizes, dimension)


def test_smooth_laws_are_rare_for_clusters_of_different_shape():
    def share(sizes):
        forms = {form.kind: form.weight for form in forms_for(sizes, "periodic", 2)}
        return forms["slow"] / forms["irregular"]

    assert share((10, 16, 20)) < 0.5 * share((4, 16, 36))

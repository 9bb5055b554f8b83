import os

import numpy as np
import pytest
import xarray as xr
from solvable import ATTRS, ring_records

from manybody.results import dataset
from manybody.results.dataset import (
    encode_attrs,
    flag_words,
    open_results,
    points_table,
    records_to_tree,
    write_results,
)
from manybody.results.schema import VARIABLES


@pytest.fixture(scope="module")
def records():
    return ring_records((4, 6), (0.5, 1.0), parameters={"d": 0.25})


@pytest.fixture(scope="module")
def file(records, tmp_path_factory):
    path = tmp_path_factory.mktemp("study") / "results.nc"
    write_results(path, records, ATTRS)
    return path


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_plain_xarray_opens_root_tree_and_single_groups(file, engine):
    pytest.importorskip({"netcdf4": "netCDF4"}.get(engine, engine))
    with xr.open_dataset(file, engine=engine) as root:
        assert dict(root.sizes) == {"sites": 2, "d": 1, "spin": 2, "rule": 2}
        assert root["sites"].dtype.kind == "i" and root["spin"].dtype == float
        assert root["rule"].values.tolist() == ["wick", "toeplitz"]
        assert root["gap"].attrs["long_name"] == "quantum minus classical ground energy"
        assert root["gap"].attrs["units"] == "meV"
        assert root["classical_energy"].dims == ("sites", "d")
        assert root["status"].dtype == np.int8
        assert root["status"].attrs["flag_meanings"].split()[1] == "converged"
        assert root.attrs["Conventions"] == "CF-1.11" and root.attrs["workflow"] == ATTRS["workflow"]
        # ring of 4 spins 1/2: E = -2 (two triplets of sublattice spins), in units of S^2
        value = root["quantum_energy"].sel(sites=4, spin=0.5, rule="wick", d=0.25).item()
        assert value == pytest.approx(-8, abs=1e-9)
    with xr.open_datatree(file, engine=engine) as tree:
        assert {"configuration", "scaling"} <= set(tree.children)
    with xr.open_dataset(file, engine=engine, group="configuration") as group:
        assert group["sites"].values.tolist() == [4, 6]
        small = group.sel(sites=4)
        assert np.isnan(small["classical_configuration"].isel(d=0, site=slice(4, None))).all()
        np.testing.assert_allclose(np.linalg.norm(small["classical_configuration"][0, :4], axis=-1), 1)
        assert small["present"].values.tolist() == [1, 1, 1, 1, 0, 0]
        assert small["pairs"].dtype.kind == "i" and small["pairs"].values[4:].tolist() == [[-1, -1]] * 2


def test_every_variable_has_long_name_and_units(file):
    tree = open_results(file)
    for node in tree.subtree:
        for name, array in node.dataset.data_vars.items():
            assert array.attrs.get("long_name"), name
            if array.dtype.kind in "fi" and name != "entanglement_order":
                assert "units" in array.attrs or "flag_values" in array.attrs, name


def test_file_gives_back_what_was_written(records, tmp_path):
    tree = records_to_tree(records, ATTRS)
    dataset.write_tree(tmp_path / "a.nc", tree)
    xr.testing.assert_identical(tree, open_results(tmp_path / "a.nc"))


def test_order_of_records_does_not_matter(records):
    xr.testing.assert_equal(
        records_to_tree(records, ATTRS),
        records_to_tree([records[k] for k in (0, *range(len(records) - 1, 0, -1))], ATTRS),
    )


def test_missing_points_wait_and_missing_values_are_unknown(records):
    tree = records_to_tree(records[:-1], ATTRS)
    last = tree.dataset.sel(sites=6, spin=1.0, rule="toeplitz", d=0.25)
    assert str(flag_words(last["status"])) == "waiting"
    assert np.isnan(last["gap"]) and np.isnan(last["quantum_energy"])
    assert int(last["quantum_method"]) == -1 and str(flag_words(last["ladder"])) == "unknown"
    assert float(last["classical_energy"]) == -6


def test_a_single_failed_point_is_a_dataset():
    record = {"sites": 3, "spin": 0.5, "rule": "wick", "parameters": {}, "status": "failed", "message": "no memory"}
    tree = records_to_tree([record])
    assert dict(tree.sizes) == {"sites": 1, "spin": 1, "rule": 1}
    assert tree["message"].values.tolist() == [[["no memory"]]]


def test_classical_records_alone_are_a_dataset(tmp_path):
    write_results(tmp_path / "results.nc", [{"sites": 5, "parameters": {"d": 0.1}, "classical_energy": -1.0}])
    assert open_results(tmp_path)["classical_energy"].values.tolist() == [[-1.0]]


def test_sizes_of_other_lattices_are_absent_and_not_waiting(records):
    named = [r | {"lattice": "long" if r["sites"] == 6 else "short"} for r in records]
    root = records_to_tree(named).dataset
    assert root["classical_energy"].dims == ("lattice", "sites", "d")
    assert (flag_words(root["status"].sel(lattice="long", sites=4)) == "absent").all()
    assert (flag_words(root["status"].sel(lattice="long", sites=6)) == "converged").all()
    assert len(points_table(root)) == len(records)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"temperature": 3.0}, "temperature"),
        ({"status": "fine"}, "fine"),
        ({"classical_energy": -3.9}, "two different values of classical_energy"),
        ({"classical_configuration": np.zeros(3)}, "classical_configuration"),
    ],
)
def test_wrong_records_are_refused_by_name(records, change, message):
    with pytest.raises(ValueError, match=message):
        records_to_tree([records[0], records[1] | change])


def test_other_misuse_is_refused(records):
    with pytest.raises(ValueError, match="no records"):
        records_to_tree([])
    with pytest.raises(ValueError, match="two records"):
        records_to_tree([records[0], records[0]])
    with pytest.raises(ValueError, match="parameters"):
        records_to_tree([records[0], records[1] | {"parameters": {}}])
    with pytest.raises(ValueError, match="status"):
        records_to_tree([{k: v for k, v in records[0].items() if k != "status"}])


def test_attributes_are_encoded_for_netcdf():
    attrs = {"a": True, "b": None, "c": {"x": 1}, "d": [1, 2], "e": ["p", 1], "f": np.float64(2), "g": np.eye(2)}
    got = encode_attrs(attrs)
    assert got == {"a": 1, "c": '{"x": 1}', "d": [1, 2], "e": '["p", 1]', "f": 2.0, "g": "[[1.0, 0.0], [0.0, 1.0]]"}
    with pytest.raises(ValueError, match="live"):
        encode_attrs({"live": object()})


def test_a_failed_write_keeps_the_old_file_and_leaves_nothing(records, tmp_path, monkeypatch):
    path = tmp_path / "results.nc"
    write_results(path, records[:1], ATTRS)
    before = path.read_bytes()

    def full(_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(dataset.os, "fsync", full)
    with pytest.raises(OSError, match="No space"):
        write_results(path, records, ATTRS)
    assert path.read_bytes() == before and os.listdir(tmp_path) == ["results.nc"]


def test_opening_tells_what_is_wrong(tmp_path):
    with pytest.raises(FileNotFoundError, match="run the workflow"):
        open_results(tmp_path)
    (tmp_path / "results.nc").write_text("no netCDF")
    with pytest.raises(ValueError, match="cannot be read"):
        open_results(tmp_path)
    xr.Dataset({"x": 1}).to_netcdf(tmp_path / "other.nc", engine="h5netcdf")
    with pytest.raises(ValueError, match="no results file"):
        open_results(tmp_path / "other.nc")


def test_pandas_table_has_words_and_one_row_per_point(file):
    frame = points_table(open_results(file), ["gap", "status", "classical_certified"])
    assert list(frame.columns) == ["sites", "d", "spin", "rule", "gap", "status", "classical_certified"]
    assert len(frame) == 8 and set(frame["status"]) == {"converged"} and set(frame["classical_certified"]) == {"yes"}


def test_observables_and_convergence_are_groups_padded_to_the_longest():
    base = {"spin": 0.5, "rule": "wick", "parameters": {}, "status": "converged", "quantum_energy": -1.0}
    small = base | {"sites": 2, "entanglement_entropy": [0.7], "quantum_correlation": -np.eye(2)}
    large = base | {"sites": 3, "entanglement_entropy": [0.1, 0.2], "trace_energy": [1.0, 0.5], "overlap_per_site": 0.9}
    tree = records_to_tree([small, large])
    assert {"entanglement", "correlations", "convergence", "overlap"} == set(tree.children)
    assert tree["entanglement"]["entanglement_entropy"].sel(sites=2).values.ravel().tolist()[0] == 0.7
    assert np.isnan(tree["entanglement"]["entanglement_entropy"].sel(sites=2, cut=1)).all()
    assert tree["correlations"]["quantum_correlation"].sizes["other_site"] == 3
    assert all(VARIABLES[n].group == g for g, node in tree.children.items() for n in node.data_vars)


def test_many_points_are_quick(tmp_path):
    import time

    records = [
        {"sites": 4, "spin": s / 2, "rule": "wick", "parameters": {"a": float(a)}, "status": "converged"}
        | {"quantum_energy": -1.0 - a, "quantum_energy_error": 1e-9, "classical_energy": -1.0, "classical_mean": 0.0}
        for a in range(2500)
        for s in (1, 2)
    ]
    start = time.process_time()
    write_results(tmp_path / "results.nc", records, scaling=False)
    # 5,000 points: far below the budget of a resumed study
    assert time.process_time() - start < 10


def test_the_selected_minimum_may_depend_on_the_rule():
    base = {"sites": 1, "spin": 0.5, "parameters": {}, "status": "converged", "quantum_energy": -1.0}
    up, side = [[0.0, 0.0, 1.0]], [[1.0, 0.0, 0.0]]
    records = [
        base | {"rule": rule, "spin": spin, "selected_configuration": n, "classical_configuration": up}
        for rule, n in (("wick", up), ("toeplitz", side))
        for spin in (0.5, 1.0)
    ]
    group = records_to_tree(records)["configuration"]
    assert group["classical_configuration"].dims == ("sites", "site", "component")
    assert group["selected_configuration"].dims == ("sites", "rule", "site", "component")
    assert group["selected_configuration"].sel(rule="toeplitz").values.ravel().tolist() == side[0]

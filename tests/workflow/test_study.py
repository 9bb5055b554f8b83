"""From a study to its dataset: records, keys that change with what matters, equal numbers however it is run."""

import numpy as np
import pytest
import xarray as xr

from manybody import pairing
from manybody.model.couplings import exchange
from manybody.workflow.document import Settings, parse_document
from manybody.workflow.journal import Journal
from manybody.workflow.parts import point_keys, study_tasks
from manybody.workflow.points import expand, study_from_functions
from manybody.workflow.study import FolderError, make_executor, plan, prepare_folder, run, run_study

TEXT = """
title = "Small rings"
[lattice]
shape = "ring"
sites = [3, 4]
[[term]]
exchange = 1.0
[[term]]
site = "every"
axis = [0, 0, 1]
anisotropy = "k"
[parameters]
k = [0.0, 0.3]
[quantum]
spin = ["1/2", 1]
rule = ["wick", "toeplitz"]
[classical]
starts = 8
"""


def small(**changes):
    text = TEXT
    for old, new in changes.values():
        assert old in text
        text = text.replace(old, new)
    return expand(parse_document(text))


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    folder = tmp_path_factory.mktemp("out")
    return folder, run(small(), folder)


def test_dataset_is_plain_xarray_with_every_point_and_provenance(finished):
    folder, _ = finished
    with xr.open_dataset(folder / "results.nc", engine="h5netcdf") as data:
        assert dict(data.sizes) == {"sites": 2, "k": 2, "spin": 2, "rule": 2}
        # ring of 4 spins 1/2: the sum of S_i.S_j is -2 (sublattices of spin 1 coupled to 0); times 1/S^2 = 4
        assert float(data["quantum_energy"].sel(sites=4, k=0.0, spin=0.5, rule="wick")) == pytest.approx(-8, abs=1e-9)
        assert float(data["classical_energy"].sel(sites=4, k=0.0)) == pytest.approx(-4, abs=1e-9)
        status = (
            data["status"]
            .attrs["flag_meanings"]
            .split()[1 + int(data["status"].sel(sites=4, k=0.3, spin=0.5, rule="wick"))]
        )
        assert status == "undefined"  # rank 2 has no operator at S = 1/2
        assert data.attrs["workflow"] == TEXT and data.attrs["title"] == "Small rings" and data.attrs["hosts"] == 1
        assert '"numpy"' in data.attrs["versions"] and '"quantum"' in data.attrs["seconds_by_part"]
    with xr.open_datatree(folder / "results.nc", engine="h5netcdf") as tree:
        n = tree["configuration"]["classical_configuration"].sel(sites=4, k=0.0).values[:4]
        np.testing.assert_allclose(np.linalg.norm(n, axis=1), 1)
        assert tree["configuration"]["pairs"].sel(sites=3).values[:3].tolist() == [[0, 1], [0, 2], [1, 2]]


def test_same_numbers_on_workers_and_resumed(finished, tmp_path):
    _, tree = finished
    study = small()
    result = run_study(study, tmp_path, make_executor(2))
    assert result.counts.failed == 0
    for name, tolerance in (("classical_energy", 1e-12), ("quantum_energy", 1e-12), ("product_energy", 1e-9)):
        np.testing.assert_allclose(result.tree[name], tree[name], rtol=tolerance, atol=1e-12)
    # half of it lost, then resumed in-process
    with Journal(tmp_path) as journal:
        keys = sorted(journal.entries())[::2]
        journal._database.executemany("delete from parts where key = ?", [(key,) for key in keys])
    again = run_study(study, tmp_path, make_executor(0))
    assert again.counts.reused == again.counts.finished - len(keys)
    for name in ("classical_energy", "quantum_energy"):
        np.testing.assert_allclose(again.tree[name], tree[name], rtol=1e-12, atol=1e-12)


def test_finished_study_is_neither_computed_nor_written_again(finished, monkeypatch):
    folder, _ = finished
    before = (folder / "results.nc").stat().st_mtime_ns
    monkeypatch.setattr(pairing, "quantum_part", None)
    result = run_study(small(), folder, make_executor(0))
    assert result.counts.reused == result.counts.finished == len(study_tasks(small()))
    assert (folder / "results.nc").stat().st_mtime_ns == before
    # a comment changes nothing but the text that is stored
    commented = run_study(expand(parse_document(TEXT + "# checked\n")), folder, make_executor(0))
    assert commented.counts.reused == commented.counts.finished
    assert commented.tree.attrs["workflow"].endswith("# checked\n")
    run_study(small(), folder, make_executor(0))


def keys(study):
    return {task.key for task in study_tasks(study)}


def test_keys_follow_what_determines_a_result():
    base = keys(small())
    assert keys(small()) == base
    renamed = small(a=('anisotropy = "k"', 'anisotropy = "d"'), b=("\nk = [", "\nd = ["), c=("Small rings", "Other"))
    assert keys(renamed) == base
    more = keys(small(a=("[0.0, 0.3]", "[0.3, 0.5, 0.0]"), b=("sites = [3, 4]", "sites = [4, 3]")))
    assert base < more
    assert keys(small(a=("exchange = 1.0", "exchange = 1.1"))) & base == set()
    assert keys(small(a=("starts = 8", "starts = 9"))) & base == set()
    finer = small(a=("[classical]", "accuracy = 1e-8\n[classical]"))
    kept = {task.key for task in study_tasks(finer)} & base
    assert kept == {task.key for task in study_tasks(small()) if task.kind in ("classical", "harmonic", "bounds")}


def test_equal_energy_functions_share_their_parts():
    study = small(a=("[0.0, 0.3]", "[0.3]"), b=('anisotropy = "k"', 'anisotropy = "0*k"'))
    two = small(a=('anisotropy = "k"', 'anisotropy = "0*k"'))
    assert keys(study) == keys(two) and len(two.points) == 2 * len(study.points)


def test_failed_bounds_leave_the_point_and_failed_quantum_marks_it(tmp_path, monkeypatch):
    study = small(a=("[0.0, 0.3]", "[0.0]"), b=("[3, 4]", "[3]"), c=('["1/2", 1]', "1"))
    real = pairing.quantum_part

    def broken(f, spin, rule, *rest, **named):
        if rule == "toeplitz":
            raise ArithmeticError("the sky fell")
        return real(f, spin, rule, *rest, **named)

    def no_bounds(*arguments):
        raise RuntimeError("no bound today")

    monkeypatch.setattr(pairing, "quantum_part", broken)
    monkeypatch.setattr(pairing, "bounds_part", no_bounds)
    result = run_study(study, tmp_path, make_executor(0))
    point = result.tree.dataset.squeeze()
    meanings = point["status"].attrs["flag_meanings"].split()
    assert [meanings[1 + value] for value in point["status"].values] == ["converged", "failed"]
    assert str(point["message"].sel(rule="toeplitz").item()).startswith("ArithmeticError: the sky fell")
    assert str(point["bounds_message"].sel(rule="wick").item()).startswith("failed: RuntimeError: no bound today")
    assert result.counts.failed == 3
    monkeypatch.undo()
    result = run_study(study, tmp_path, make_executor(0), retry_failed=True)
    assert result.counts.failed == 0 and np.isfinite(result.tree["quantum_energy"]).all()


def test_function_of_ones_own_runs_the_same_way():
    pairs = np.array([[0, 1], [1, 2], [0, 2]])
    function = exchange(3, pairs, 1.0) * 2.0 + 0.5
    study = study_from_functions({3: function}, spins=["1/2"], rules=["wick"], settings=Settings(starts=4))
    tree = run(study)
    # three spins 1/2, all coupled: sum S_i.S_j = (1/2 3/2 - 9/4)/2 = -3/4; times 4 for S = 1/2, times 2, plus 1/2
    assert float(tree["quantum_energy"].item()) == pytest.approx(-5.5, abs=1e-9)
    assert float(tree["classical_energy"].item()) == pytest.approx(-2.5, abs=1e-9)  # 120 degrees


def test_plan_prints_what_the_run_will_refuse(tmp_path, monkeypatch):
    from manybody.workflow import cluster

    study = small(a=("[3, 4]", "[4, 14]"), b=("[0.0, 0.3]", "[0.0]"))
    made = plan(study, workers=2)
    assert made.counts == {"classical": 2, "harmonic": 4, "exact": 8, "bounds": 8} and made.refused == []
    monkeypatch.setattr(cluster, "local_memory", lambda workers: 2e8)
    made = plan(study, workers=2)
    assert [task.label for task, _ in made.refused] == [
        "14 sites, k = 0, S = 1, wick", "14 sites, k = 0, S = 1, toeplitz",
    ]  # fmt: skip
    assert "a worker can give 200.0 MB" in made.refused[0][1]
    from manybody.workflow.inprocess import InProcess

    monkeypatch.setattr(pairing, "quantum_part", lambda *a, **k: {"status": "converged"})
    result = run_study(study, tmp_path, InProcess(2e8))
    with Journal(tmp_path, write=False) as journal:
        refused = [entry for entry in journal.entries().values() if entry.status == "refused"]
    assert result.counts.refused == 2 and sorted(e.message for e in refused) == sorted(why for _, why in made.refused)


def test_plan_writes_nothing_and_counts_what_a_folder_has(finished, tmp_path):
    folder, _ = finished
    before = sorted((path.name, path.stat().st_mtime_ns) for path in folder.iterdir())
    made = plan(small(a=("sites = [3, 4]", "sites = [3, 4, 5]")), 2, folder)
    assert made.reused == len(study_tasks(small())) and made.calibrated
    assert made.counts["classical"] == 2
    assert sorted((path.name, path.stat().st_mtime_ns) for path in folder.iterdir()) == before


def test_unusable_folders_are_told_before_anything_runs(tmp_path):
    (tmp_path / "file").write_text("")
    for bad in (tmp_path / "file", tmp_path / "file" / "below", "/proc/manybody/out"):
        with pytest.raises(FolderError, match="cannot be written"):
            prepare_folder(bad)
    assert [path.name for path in tmp_path.iterdir()] == ["file"]
    assert prepare_folder(tmp_path / "a" / "b").is_dir()


def test_point_keys_of_a_point_name_its_tasks():
    study = small()
    tasks = {task.key: task for task in study_tasks(study)}
    for point in study.points:
        if not point.undefined:
            kinds = [tasks[key].kind for key in point_keys(study, point).all()]
            assert kinds == ["classical", "harmonic", "exact", "bounds"]


def test_executors_that_contradict_themselves():
    with pytest.raises(ValueError, match="one of scheduler"):
        make_executor(0, "tcp://a:1", "file")
    with pytest.raises(ValueError, match="no batch system 'abacus'; known are htcondor"):
        make_executor(1, batch="abacus")
    with pytest.raises(ValueError, match="must not be negative"):
        make_executor(-1)

"""The command as a user meets it: what it prints, its exit status, and that bad input leaves nothing behind."""

import os
import signal
import subprocess
import sys

import pytest

from manybody import command, pairing
from manybody.workflow.journal import Journal

STUDY = """
[lattice]
shape = "chain"
sites = [2, 3]
[[term]]
exchange = 1.0
[quantum]
spin = [1, 2]
rule = "wick"
[classical]
starts = 4
"""


@pytest.fixture
def study(tmp_path):
    file = tmp_path / "study.toml"
    file.write_text(STUDY)
    return file


@pytest.fixture
def manybody(monkeypatch, capsys):
    """Run the command in this process: (exit status, standard output, standard error)."""

    def call(*arguments):
        monkeypatch.setattr(sys, "argv", ["manybody", *map(str, arguments)])
        with pytest.raises(SystemExit) as ended:
            command.main()
        out, err = capsys.readouterr()
        return ended.value.code or 0, out, err

    return call


def test_plan_run_status_and_run_again(manybody, study, tmp_path):
    out = tmp_path / "out"
    code, text, _ = manybody("plan", study)
    assert code == 0 and "4 points on 2 clusters" in text and not out.exists()
    code, text, errors = manybody("run", study, "--out", out, "--workers", "0")
    assert code == 0, errors
    rows = [line.split() for line in text.splitlines()]
    assert rows[0] == ["sites", "spin", "rule", "classical", "quantum", "error", "gap/site", "relative", "gap", "flags"]
    # two spins S, H = S1.S2/S^2: ground energy -(S+1)/S
    two = next(row for row in rows if row[:3] == ["2", "1", "wick"])
    assert two[3:5] == ["-1.0000000", "-2.0000000"] and two[6:] == ["-0.50000", "-1.00000"]
    assert f"12 parts finished, 0 of them before. Dataset: {out / 'results.nc'}" in text
    code, text, _ = manybody("run", study, "--out", out, "--workers", "0")
    assert code == 0 and "12 parts finished, 12 of them before" in text
    code, text, _ = manybody("status", out)
    assert code == 0 and text.startswith("study\n12 finished\n") and "No run is going on." in text


def test_failed_points_give_status_3_and_are_listed(manybody, study, tmp_path, monkeypatch):
    def broken(*arguments, **named):
        raise ArithmeticError("overflow in site 1")

    out = tmp_path / "out"
    with monkeypatch.context() as patch:
        patch.setattr(pairing, "quantum_part", broken)
        code, text, errors = manybody("run", study, "--out", out, "--workers", "0")
    assert (
        code == 3
        and "4 failed: `manybody status" in errors
        and f"`manybody run {study} --out {out} --workers 0 --retry-failed`" in errors
    )
    assert text.count(" failed\n") == 4
    code, text, _ = manybody("status", out)
    assert code == 0 and "2 sites, S = 1, wick (exact): ArithmeticError: overflow in site 1" in text
    code, text, errors = manybody("run", study, "--out", out, "--workers", "0")
    assert code == 3  # failed points are not tried again unasked
    code, text, errors = manybody("run", study, "--out", out, "--workers", "0", "--retry-failed")
    assert code == 0, errors


def test_bad_input_is_one_message_status_2_and_nothing_written(manybody, study, tmp_path):
    out = tmp_path / "out"
    bad = tmp_path / "bad.toml"
    bad.write_text(STUDY.replace("spin = [1, 2]", "spin = 0.3").replace("exchange", "exchnge"))
    for arguments, words in (
        (("run", bad, "--out", out), ("2 problems", "exchnge", "0.3")),
        (("plan", bad), ("2 problems",)),
        (("run", tmp_path / "none.toml", "--out", out), ("none.toml", "cannot be opened")),
        (("run", study, "--out", study), ("study.toml", "cannot be written")),
        (("run", study, "--out", "/proc/manybody"), ("/proc/manybody", "cannot be written")),
        (("run", study, "--out", out, "--workers", "-1"), ("--workers must not be negative",)),
        (("run", study, "--out", out, "--workers", "1", "--scheduler", "tcp://a:1"), ("give one of them",)),
        (("run", study, "--out", out, "--batch", "abacus"), ("no batch system 'abacus'",)),
        (("run", study), ("--out",)),
        (("run", study, "--out", out, "--wrokers", "2"), ("--wrokers",)),
        (("draw", tmp_path), ("no results",)),
        (("report", tmp_path), ("no results",)),
    ):
        code, text, errors = manybody(*arguments)
        assert code == 2, (arguments, text, errors)
        assert all(word in errors for word in words) and "Traceback" not in errors and text == ""
        assert sorted(path.name for path in tmp_path.iterdir()) == ["bad.toml", "study.toml"]


def test_folder_without_a_study_is_told(manybody, tmp_path):
    code, _, errors = manybody("status", tmp_path)
    assert code == 2 and "holds no study" in errors


def test_second_run_is_refused(manybody, study, tmp_path):
    out = tmp_path / "out"
    out.mkdir()
    with Journal(out):
        code, _, errors = manybody("run", study, "--out", out, "--workers", "0")
        assert code == 2 and f"in use by process {os.getpid()}" in errors
        code, text, _ = manybody("status", out)
        assert code == 0 and "A run is going on" in text


def test_trouble_with_the_disk_is_status_1(manybody, study, tmp_path, monkeypatch):
    from manybody.results import dataset

    def full(path, tree):
        raise OSError(28, "No space left on device")

    out = tmp_path / "out"
    with monkeypatch.context() as patch:
        patch.setattr(dataset, "write_tree", full)
        code, _, errors = manybody("run", study, "--out", out, "--workers", "0")
    assert code == 1 and "results.nc cannot be written: No space left on device" in errors
    assert "safe in the journal" in errors
    code, text, _ = manybody("run", study, "--out", out, "--workers", "0")
    assert code == 0 and "12 parts finished, 12 of them before" in text


def test_interrupted_run_says_how_to_go_on(study, tmp_path):
    out = tmp_path / "out"
    # The first bounds wait until the run has said that it stops.
    script = (
        "import sys; from manybody import command, pairing; real = pairing.bounds_part\n"
        "def held(*given):\n"
        "    print('held', flush=True); sys.stdin.readline(); return real(*given)\n"
        "pairing.bounds_part = held; command.main()"
    )
    run = [sys.executable, "-c", script, "run", str(study), "--out", str(out), "--workers", "0"]
    pipes = dict.fromkeys(("stdin", "stdout", "stderr"), subprocess.PIPE)
    with subprocess.Popen(run, text=True, **pipes) as process:
        assert process.stdout.readline() == "held\n", process.stderr.read()
        process.send_signal(signal.SIGINT)
        errors = ""
        while "Stopping: waiting up to 30 s for" not in errors:
            line = process.stderr.readline()
            assert line, errors
            errors += line
        _, rest = process.communicate("on\n", timeout=120)
    errors += rest
    assert process.returncode == 130, errors
    assert f"`manybody run {study} --out {out} --workers 0` goes on from here" in errors and "Traceback" not in errors
    assert (out / "results.nc").is_file()
    with Journal(out) as journal:
        done = sum(entry.status == "finished" for entry in journal.entries().values())
        assert 0 < done < len(journal.study())

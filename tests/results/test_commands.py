"""`manybody draw` and `manybody report` on a finished folder."""

import pytest
from solvable import ATTRS, ring_records
from typer.testing import CliRunner

from manybody.command import BadInput, app
from manybody.results.dataset import write_results


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    path = tmp_path_factory.mktemp("commands")
    write_results(path / "results.nc", ring_records((4, 6), (0.5, 1.0), rules=("wick",)), ATTRS)
    return path


def call(*words):
    return CliRunner().invoke(app, [str(w) for w in words])


def test_draw_lists_files_and_what_it_left_out(folder, tmp_path):
    result = call("draw", folder, "--out", tmp_path, "--format", "svg", "--normalization", "spin")
    assert result.exit_code == 0, result.output
    assert str(tmp_path / "ladder.svg") in result.output and (tmp_path / "ladder.svg").is_file()
    assert "not drawn: gap-parameters: the study sweeps no parameter" in result.output
    assert not list(tmp_path.glob("*.png"))


def test_report_writes_one_page(folder):
    result = call("report", folder, "--tolerance", "0.1")
    assert result.exit_code == 0, result.output
    assert "within 10" in (folder / "report.html").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("words", "reason"),
    [
        (("draw", "{}", "--format", "bmp"), "choose among"),
        (("draw", "{}", "--normalization", "joule"), "choose energy or spin"),
        (("report", "{}", "--normalization", "joule"), "choose energy or spin"),
        (("draw", "{}/missing"), "run the workflow"),
    ],
)
def test_bad_input_is_one_message(folder, words, reason):
    result = call(*(word.format(folder) for word in words))
    assert isinstance(result.exception, BadInput) and reason in str(result.exception)

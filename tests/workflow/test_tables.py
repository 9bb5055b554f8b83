"""Tables of pairs and positions: what is read, and that a message holds the offending cell and nothing else."""

import os

import pytest

from manybody.workflow import tables
from manybody.workflow.tables import read_pair_table


@pytest.fixture
def read(tmp_path):
    def read(pairs, positions=None, sites=None):
        (tmp_path / "p.csv").write_bytes(pairs if isinstance(pairs, bytes) else pairs.encode())
        if positions is not None:
            (tmp_path / "x.csv").write_text(positions)
        return read_pair_table(tmp_path, "p.csv", "x.csv" if positions is not None else None, sites)

    return read


def test_good_tables(read):
    table, problems = read("# measured\nsite_a,site_b,label,exchange\n\n1, 0 ,rim,1.5\r\n1,2,,-2e-1\n")
    assert not problems
    assert table.pairs == ((1, 0), (1, 2)) and table.labels == ("rim", "") and table.sites == 3
    assert table.exchange == ((1.5, 0, 0, 0, 1.5, 0, 0, 0, 1.5), (-0.2, 0, 0, 0, -0.2, 0, 0, 0, -0.2))
    table, _ = read("exchange_zz,site_a,site_b,exchange_xx,exchange_yy\n3,0,1,1,2")
    assert table.exchange == ((1, 0, 0, 0, 2, 0, 0, 0, 3),) and table.labels == ()
    header = ",".join(tables.MATRIX)
    table, _ = read(f"\ufeffsite_a,site_b,{header}\n0,1,1,2,3,4,5,6,7,8,9")
    assert table.exchange == ((1, 2, 3, 4, 5, 6, 7, 8, 9),)
    table, _ = read("site_a,site_b\n0,1", "site,x,y,z\n1,1,0,0\n0,0,0,0\n")
    assert table.positions == ((0, 0, 0), (1, 0, 0)) and table.exchange == ()
    table, _ = read("site_a,site_b\n0,1", sites=5)
    assert table.sites == 5


@pytest.mark.parametrize(
    ("pairs", "sites", "place", "value", "word"),
    [
        ("site_a,site_b\n0,1\n0,x7\n", None, "p.csv line 3, column site_b", '"x7"', "no site number"),
        ("site_a,site_b\n0,-1", None, "p.csv line 2, column site_b", '"-1"', "negative"),
        ("site_a,site_b\n0,4", 4, "p.csv line 2, column site_b", '"4"', "0 to 3"),
        ("site_a,site_b\n0,99999999", None, "p.csv line 2, column site_b", '"99999999"', "allowed"),
        ("site_a,site_b\n2,2", None, "p.csv line 2, column site_b", '"2"', "itself"),
        ("site_a,site_b\n0,1\n1,2\n1,0", None, "p.csv line 4", "", "line 2 has them"),
        ("site_a,site_b,label\n0,1,u\n1,0,u", None, "p.csv line 3", "", 'under label "u"'),
        ("site_a,site_b,label\n0,1,nearest", None, "p.csv line 2, column label", '"nearest"', "shell"),
        ("site_a,site_b,label\n0,1,all", None, "p.csv line 2, column label", '"all"', "shell"),
        ("site_a,site_b,exchange\n0,1,nan", None, "p.csv line 2, column exchange", '"nan"', "finite"),
        ("site_a,site_b,exchange\n0,1,1e999", None, "p.csv line 2, column exchange", '"1e999"', "finite"),
        ("site_a,site_b,exchange\n0,1,", None, "p.csv line 2, column exchange", "", "empty"),
        ("site_a,site_b,exchange\n0,1,2*d", None, "p.csv line 2, column exchange", '"2*d"', "no number"),
        ("site_a,site_b,exchange_xx\n0,1,2", None, "p.csv", "", "exchange_xx"),
        ("site_a,site_b,J\n0,1,2", None, "p.csv line 1", '"J"', "no column"),
        ("site_a,site_a,site_b\n0,1,2", None, "p.csv line 1", '"site_a"', "twice"),
        ("site_a\n0", None, "p.csv line 1", "", "site_b is missing"),
        ("site_a,site_b\n0,1,2", None, "p.csv line 2", "", "3 cells for 2 columns"),
        ('site_a,site_b\n0,"1\n', None, "p.csv line 2", "", "no CSV"),
        ("site_a,site_b\n", None, "p.csv", "", "no pair"),
        ("", None, "p.csv", "", "empty"),
        (b"site_a,site_b\n0,\xff", None, "p.csv", "", "UTF-8"),
        (b"site_a,site_b\n0,1\x00", None, None, None, None),
    ],
)
def test_bad_pairs(read, pairs, sites, place, value, word):
    table, problems = read(pairs, sites=sites)
    assert table is None and problems
    if place is None:
        return
    (problem,) = problems
    assert problem.place == place and problem.value == value and word in problem.wrong


@pytest.mark.parametrize(
    ("positions", "word"),
    [
        ("site,x,y,z\n0,0,0,0", "no position for site 1"),
        ("site,x,y,z\n0,0,0,0\n0,1,1,1", "again"),
        ("site,x,y,z\n0,0,0,0\n7,1,1,1", "0 to 1"),
        ("site,x,y,z\n0,0,0,0\n1,1,1,inf", "finite"),
        ("site,x,y\n0,0,0\n1,1,1", "z is missing"),
    ],
)
def test_bad_positions(read, positions, word):
    table, problems = read("site_a,site_b\n0,1", positions)
    assert table is None and word in problems[0].wrong and problems[0].place.startswith("x.csv")


def test_many_problems_are_counted(read):
    _, problems = read("site_a,site_b\n" + "x,1\n" * 50)
    assert len(problems) == tables.SHOWN + 1 and "40 more" in problems[-1].wrong


def test_only_regular_csv_files_of_bounded_size(tmp_path, monkeypatch):
    os.mkfifo(tmp_path / "pipe.csv")
    (tmp_path / "folder.csv").mkdir()
    (tmp_path / "secret.txt").write_text("site_a,site_b\n0,1\n")
    for name, word in (
        ("pipe.csv", "regular"),
        ("folder.csv", "regular"),
        ("secret.txt", ".csv"),
        ("absent.csv", "opened"),
        ("nul\0.csv", ".csv"),
        ("x" * 5000 + ".csv", "opened"),
    ):
        table, (problem,) = read_pair_table(tmp_path, name, None, None)
        assert table is None and word in problem.wrong
    monkeypatch.setattr(tables, "MAX_BYTES", 10)
    (tmp_path / "large.csv").write_text("site_a,site_b\n0,1\n")
    assert "larger" in read_pair_table(tmp_path, "large.csv", None, None)[1][0].wrong


def test_a_message_quotes_no_more_than_the_cell(read):
    secret = "the rest of the line is nobody's business"
    _, problems = read(f"site_a,site_b,label\n0,{'y' * 500},{secret.replace(',', '')}\n")
    text = "\n".join(map(str, problems))
    assert "rest" not in problems[0].value and "y" * 41 not in text

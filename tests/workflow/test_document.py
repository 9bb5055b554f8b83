"""Workflow files: what is read from good ones, and the message that each kind of bad one gets."""

from pathlib import Path

import pytest

from manybody.model import lattice as lt
from manybody.workflow.document import DocumentError, Settings, parse_document, read_document
from manybody.workflow.problems import QUOTED

READY = sorted((Path(__file__).parents[2] / "workflows").glob("*.toml"))

BASE = """
[lattice]
shape = "chain"
sites = [4, 6]
[[term]]
pair = "nearest"
exchange = "1 + d"
[parameters]
d = [0.0, 0.1]
[quantum]
spin = [1, "3/2"]
"""


def problems(text, folder="."):
    with pytest.raises(DocumentError) as caught:
        parse_document(text, folder)
    assert str(caught.value).count("\n") == len(caught.value.problems)
    return caught.value.problems


def the_problem(text, folder="."):
    found = problems(text, folder)
    assert len(found) == 1, [str(problem) for problem in found]
    return found[0]


@pytest.mark.parametrize("path", READY, ids=lambda path: path.stem)
def test_ready_files_are_valid_and_say_what_they_answer(path):
    document = read_document(path)
    assert document.text == path.read_text(encoding="utf-8")
    assert "Question:" in document.text


def test_five_lines_are_a_study():
    document = parse_document(
        '[lattice]\nshape = "chain"\nsites = 4\n[[term]]\nexchange = 1', source="folder/short.toml"
    )
    assert document.lattices == (("", (lt.chain(4),)),)
    assert document.spins == (0.5, 1, 1.5, 2) and document.rules == ("substitution",)
    assert document.settings == Settings() and document.energy_unit == "1" and document.title == "short"


def test_everything_that_a_file_may_say():
    document = parse_document(
        """
title = "All of it"
[[lattice]]
name = "tube"
shape = "square"
extent = [[4, 3], [6, 3]]
periodic = [true, false]
[[lattice]]
name = "hexagons"
shape = "honeycomb"
extent = [3, 3]
periodic = true
[[term]]
exchange = [[1, 0, "d"], [0, 1, 0], ["-d", 0, "pi/4"]]
[[term]]
pair = "second"
antisymmetric = [0, "d", 0]
[[term]]
pair = "a"
biquadratic = "-d**2"
[[term]]
site = "odd"
field = [0, 0, 0.2]
[[term]]
site = [0, 2]
axis = [1, "d", 0]
anisotropy = -0.3
[parameters]
d = [0, "sqrt(2)"]
[quantum]
spin = ["1/2", 1, 2.5, "7/2"]
rule = ["wick", "weyl", "toeplitz", "substitution"]
accuracy = 1e-6
max_bond = 100
memory = "500 MB"
observables = ["moments", "entanglement"]
[classical]
starts = 8
seed = 3
[units]
energy = "meV"
"""
    )
    assert document.title == "All of it" and document.energy_unit == "meV"
    assert [name for name, _ in document.lattices] == ["tube", "hexagons"]
    assert document.lattices[0][1] == (lt.square([4, 3], [True, False]), lt.square([6, 3], [True, False]))
    assert document.lattices[1][1] == (lt.honeycomb([3, 3], True),)
    assert document.parameters == {"d": (0.0, pytest.approx(2**0.5))}
    assert document.spins == (0.5, 1.0, 2.5, 3.5)
    assert document.settings == Settings(8, 3, 1e-6, 100, 500_000_000, ("moments", "entanglement"))
    terms = [entry.at(document.lattices[0][1][0], {"d": 2.0}) for entry in document.terms]
    assert terms[0].values == pytest.approx((1, 0, 2, 0, 1, 0, -2, 0, 0.7853981633974483))
    assert terms[1].where == "second" and terms[1].values == (0, 2, 0)
    assert terms[2].values == (-4,) and terms[3].where == "odd"
    assert terms[4].where == (0, 2) and terms[4].axis == pytest.approx((5**-0.5, 2 * 5**-0.5, 0))


BAD = [
    # replaced in BASE, by what, word of the message, place
    ('shape = "chain"', 'shape = "chian"', 'did you mean "chain"', "lattice: shape"),
    ('shape = "chain"', "", "has no shape", "lattice"),
    ('shape = "chain"', "shape = 4", "is a number", "lattice: shape"),
    ("sites = [4, 6]", "", "has no sites", "lattice"),
    ("sites = [4, 6]", "sites = []", "is empty", "lattice: sites"),
    ("sites = [4, 6]", "sites = [4, -6]", "out of range", "lattice: sites, entry 2"),
    ("sites = [4, 6]", "sites = [4, 6, 4]", "repeats", "lattice: sites, entry 3"),
    ("sites = [4, 6]", "sites = 100000000000", "out of range", "lattice: sites"),
    ("sites = [4, 6]", f"sites = 1{'0' * 4000}", "out of range", "lattice: sites"),
    ("sites = [4, 6]", f"sites = 1{'0' * 5000}", "too long", "the file"),
    ("sites = [4, 6]", "sites = [4, 6.5]", "no whole number", "lattice: sites, entry 2"),
    ("sites = [4, 6]", "sites = nan", "not finite", "lattice: sites"),
    ("sites = [4, 6]", "sites = true", "true or false", "lattice: sites"),
    ("sites = [4, 6]", "sites = 4\nextent = [2, 2]", "does not go with", "lattice: extent"),
    ("sites = [4, 6]", "sites = 4\npairs = 'a.csv'", "does not go with", "lattice: pairs"),
    ("sites = [4, 6]", "sites = 4\ncolour = 'red'", "no key of this block", "lattice: colour"),
    ("sites = [4, 6]", "sites = 4\nperiodic = 1", "is a number", "lattice: periodic"),
    ("sites = [4, 6]", "sites = 4\nperiodic = [true, true]", "2 entries for 1 direction", "lattice: periodic"),
    ('shape = "chain"', 'shape = "ladder"\nperiodic = true', "too small for 'nearest'", "term 1: pair"),
    ('shape = "chain"', 'shape = "ring"\nperiodic = false', "contradicts", "lattice: periodic"),
    ('pair = "nearest"', 'pair = "nearset"', "it has nearest, second, third, all", "term 1: pair"),
    ('pair = "nearest"', 'pair = "rung"', "selects no pairs", "term 1: pair"),
    ('pair = "nearest"', "pair = 3", "is a number", "term 1: pair"),
    ('pair = "nearest"', 'site = "every"', "does not go with exchange", "term 1: site"),
    ('exchange = "1 + d"', 'exchange = "1 + d"\naxis = [0, 0, 1]', "only anisotropy", "term 1: axis"),
    ('exchange = "1 + d"', 'exchange = "1 + d"\nbiquadratic = 1', "in one block", "term 1"),
    ('exchange = "1 + d"', 'exchange = "1 + e"', '"e", which is no parameter', "term 1: exchange"),
    ('exchange = "1 + d"', 'exchange = "1/d"', "divides by zero at d = 0", "term 1: exchange"),
    ('exchange = "1 + d"', 'exchange = [1, 2, "log(d)"]', "wrong number) at d = 0", "term 1: exchange, entry 3"),
    ('exchange = "1 + d"', 'exchange = "d.real"', "no arithmetic", "term 1: exchange"),
    ('exchange = "1 + d"', 'exchange = "__import__(d)"', "the functions are", "term 1: exchange"),
    ('exchange = "1 + d"', "exchange = [1, 2]", "is no exchange", "term 1: exchange"),
    ('exchange = "1 + d"', "exchange = [[1, 2, 3], [1, 2, 3], [1, 2, nan]]", "finite", "term 1: exchange, entry 3, 3"),
    ('exchange = "1 + d"', "exchange = inf", "not finite", "term 1: exchange"),
    ('exchange = "1 + d"', "exchange = true", "true or false", "term 1: exchange"),
    ('exchange = "1 + d"', "exchange = 2026-01-01", "date", "term 1: exchange"),
    ('exchange = "1 + d"', 'exchange = "table"\n[[term]]\nexchange="d"', "no exchange column", "term 1: exchange"),
    ('exchange = "1 + d"', "exchange = 1.0", "used by no term", "parameters: d"),
    ('exchange = "1 + d"', "exhange = 1.0", 'did you mean "exchange"', "term 1: exhange"),
    ('exchange = "1 + d"', "", "names no coupling", "term 1"),
    ("d = [0.0, 0.1]", "d = []", "is empty", "parameters: d"),
    ("d = [0.0, 0.1]", "d = [0.1, 0.1]", "repeats", "parameters: d, entry 2"),
    ("d = [0.0, 0.1]", "d = ['2*d']", "uses d", "parameters: d, entry 1"),
    ("d = [0.0, 0.1]", "d = {a = 1}", "is a table", "parameters: d"),
    ("d = [0.0, 0.1]", "d = 1\nspin = 2", "the dataset or the workflow file needs", "parameters: spin"),
    ("d = [0.0, 0.1]", "d = 1\ngap = 2", "the dataset or the workflow file needs", "parameters: gap"),
    ("d = [0.0, 0.1]", "d = 1\nsqrt = 2", "function or constant", "parameters: sqrt"),
    ("d = [0.0, 0.1]", 'd = 1\n"2 x" = 2', "is no name", "parameters: 2 x"),
    ('spin = [1, "3/2"]', "spin = 0.3", "is no spin", "quantum: spin"),
    ('spin = [1, "3/2"]', 'spin = [1, "1/3"]', "is no spin", "quantum: spin, entry 2"),
    ('spin = [1, "3/2"]', "spin = [1, 0]", "is no spin", "quantum: spin, entry 2"),
    ('spin = [1, "3/2"]', 'spin = ["3/2", 1.5]', "repeats", "quantum: spin, entry 2"),
    ('spin = [1, "3/2"]', "spin = 1e9", "too large", "quantum: spin"),
    ('spin = [1, "3/2"]', "rule = 'toplitz'", 'did you mean "toeplitz"', "quantum: rule"),
    ('spin = [1, "3/2"]', "rule = []", "is empty", "quantum: rule"),
    ('spin = [1, "3/2"]', "accuracy = 0", "out of range", "quantum: accuracy"),
    ('spin = [1, "3/2"]', "max_bond = 1.5", "no whole number", "quantum: max_bond"),
    ('spin = [1, "3/2"]', "memory = '4 elephants'", "no amount of memory", "quantum: memory"),
    ('spin = [1, "3/2"]', "observables = 'energy'", "is no observable", "quantum: observables"),
    ("[quantum]", "[[quantum]]", "is a list", "quantum"),
    ("[quantum]", "[quantums]", 'did you mean "quantum"', "quantums"),
    ("[[term]]", "[[terms]]", None, None),
    ("[parameters]\nd = [0.0, 0.1]", "", "no parameter", "term 1: exchange"),
    ("[quantum]\n", "[classical]\nstarts = 0\n[quantum]\n", "out of range", "classical: starts"),
    ("[quantum]\n", "[units]\nenergy = ''\n[quantum]\n", "cannot be used", "units: energy"),
    ("[lattice]", "title = 5\n[lattice]", "is a number", "title"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "word", "place"), BAD, ids=[f"{new[:40]!r}" for _, new, _, _ in BAD])
def test_bad_values(old, new, word, place):
    assert BASE.count(old) == 1
    text = BASE.replace(old, new)
    if word is None:
        assert {"is no key of a workflow file", "there is no term"} <= {problem.wrong for problem in problems(text)}
        return
    problem = the_problem(text)
    assert word in str(problem) and problem.place == place
    assert problem.remedy
    if problem.line is not None:
        key = place.split(": ")[-1].split(",")[0]
        line = text.splitlines()[problem.line - 1]
        assert key in line or place in ("lattice", "term 1"), line


def test_all_problems_at_once():
    text = (
        BASE.replace("chain", "chian").replace("1 + d", "1 + e").replace("[0.0, 0.1]", "[]").replace("3/2", "3/4")
        + "rule = 'wik'\n[[term]]\nfield = [0, 0]\n[color]\n"
    )
    places = {problem.place for problem in problems(text)}
    assert places == {
        "lattice: shape", "term 1: exchange", "parameters: d", "quantum: spin, entry 2", "quantum: rule",
        "term 2: field", "color",
    }  # fmt: skip


def lattice(text, term="exchange = 1"):
    return f"[lattice]\n{text}\n[[term]]\n{term}\n"


@pytest.mark.parametrize(
    ("text", "word", "place"),
    [
        (lattice('shape = "square"\nextent = [[4, 4], [2, 8]]'), "16 sites, as entry 1", "lattice: extent, entry 2"),
        (lattice('shape = "square"\nextent = [4, 4, 4]'), "2 numbers", "lattice: extent"),
        (lattice('shape = "square"\nextent = [1000000, 1000000]'), "at most", "lattice: extent"),
        (lattice('shape = "square"\nsites = 16\nextent = [4, 4]'), "does not go with", "lattice: sites"),
        (lattice('shape = "square"\nextent = [2, 4]\nperiodic = true'), "too small", "term 1"),
        (lattice('shape = "square"\nextent = [4, 4]\nperiodic = [true]'), "1 entries", "lattice: extent"),
        (lattice('shape = "star"\nsites = 5\nperiodic = true'), "does not go with", "lattice: periodic"),
        (lattice('shape = "ladder"\nsites = 5'), "even number", "lattice: sites"),
        (lattice('shape = "ring"\nsites = [5, 2]'), "at least 3", "lattice: sites, entry 2"),
        (lattice('shape = "complete"\nsites = 1000000'), "at most", "term 1"),
        (lattice('shape = "ring"\nsites = 5', 'site = "even"\nfield = [0, 0, 1]'), "no even and odd", "term 1: site"),
        (lattice('shape = "chain"\nsites = 4', "site = [0, 4]\nfield = [0, 0, 1]"), "does not exist", "term 1: site"),
        (lattice('shape = "chain"\nsites = 4', "site = [0, 0]\nfield = [0, 0, 1]"), "repeats", "term 1: site, entry 2"),
        (lattice('shape = "chain"\nsites = 4', "site = 'red'\nfield = [0, 0, 1]"), "is no selection", "term 1: site"),
        (lattice('shape = "chain"\nsites = 4', "axis = [0, 0, 0]\nanisotropy = 1"), "not be zero", "term 1: axis"),
        (lattice('shape = "chain"\nsites = 1'), "selects nothing", "term 1"),
        (lattice('shape = "table"'), "names no table", "lattice"),
        (lattice('shape = "table"\npairs = "absent.csv"'), "cannot be opened", "absent.csv"),
        (lattice('shape = "table"\npairs = "/etc/passwd"'), "end in .csv", "/etc/passwd"),
        (lattice('shape = "table"\npairs = 5'), "is a number", "lattice: pairs"),
        ("[[term]]\nexchange = 1", "there is no lattice", "the file"),
        ("lattice = 5\n[[term]]\nexchange = 1", "is a number", "lattice"),
        ("lattice = []\n[[term]]\nexchange = 1", "is empty", "lattice"),
        ("term = 5\n[lattice]\nshape = 'chain'\nsites = 4", "is a number", "term"),
        ("term = []\n[lattice]\nshape = 'chain'\nsites = 4", "there is no term", "the file"),
        ("parameters = 5\n" + lattice('shape = "chain"\nsites = 4'), "is a number", "parameters"),
        ("title =", "is not TOML", "end of the file"),
        ("a = 1\na = 2", "is not TOML", "end of the file"),
        ("x = " + "[" * 100000, "nested too deeply", "the file"),
    ],
)  # fmt: skip
def test_bad_documents(text, word, place):
    problem = the_problem(text)
    assert word in str(problem) and problem.place == place


def test_axis_that_vanishes_at_one_parameter():
    text = lattice('shape = "chain"\nsites = 4', 'axis = ["d", 0, 0]\nanisotropy = 1') + "[parameters]\nd = [1, 0]\n"
    assert "zero" in the_problem(text).wrong and "at d = 0" in the_problem(text).wrong


def test_several_lattices_need_distinct_names():
    block = '[[lattice]]\nshape = "chain"\nsites = 4\n'
    assert {p.wrong for p in problems(block + block + "[[term]]\nexchange = 1")} == {"has no name"}
    named = block + 'name = "x"\n'
    assert "already" in the_problem(named + named + "[[term]]\nexchange = 1").wrong
    single = parse_document(block + "[[term]]\nexchange = 1")
    assert [name for name, _ in single.lattices] == [""]  # one block is no dimension


def test_too_many_points():
    many = ", ".join(map(str, range(1, 1101)))
    text = BASE.replace("d = [0.0, 0.1]", f"d = [{many}]").replace("sites = [4, 6]", f"sites = [{many}]")
    assert "points" in the_problem(text).wrong


def test_files_that_are_none(tmp_path):
    for name, content, word in (
        ("latin.toml", b"# one\ntitle = 'caf\xe9'", "UTF-8"),
        ("large.toml", b"#" * (2**20 + 1), "larger"),
        ("empty.toml", b"", "there is no"),
    ):
        (tmp_path / name).write_bytes(content)
        with pytest.raises(DocumentError, match=word):
            read_document(tmp_path / name)
    for path in (tmp_path, tmp_path / "absent.toml", "/dev/null", "nul\0byte"):
        with pytest.raises(DocumentError, match=r"cannot be opened|not a regular file"):
            read_document(path)
    (tmp_path / "mark.toml").write_bytes(b"\xef\xbb\xbf" + BASE.encode())
    assert read_document(tmp_path / "mark.toml").title == "mark"


def test_messages_stay_short_and_printable():
    long = "x" * 5000
    for text in (
        BASE.replace('"chain"', f'"{long}"'),
        BASE.replace("sites = [4, 6]", f"{long} = 4\nsites = 4"),
        BASE.replace('"1 + d"', f"['{long}', '\\u001b[31m', 3]"),
        BASE.replace("[4, 6]", str(list(range(-3000, 0)))),
    ):
        for problem in problems(text):
            assert len(problem.value) <= 2 * QUOTED + 10 and str(problem).isprintable()


def test_one_term_tells_all_its_faults_at_once():
    text = lattice('shape = "chain"\nsites = 4', 'axis = [0, 0, 0]\nanisotropy = "2 * q"')
    told = [problem.wrong for problem in problems(text)]
    assert len(told) == 2 and "must not be zero" in told[0] and '"q", which is no parameter' in told[1]

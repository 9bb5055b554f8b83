"""Ready workflow files, mutated: each is a valid document or a DocumentError with places, and nothing else is read."""

import sys
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from manybody.workflow.document import DocumentError, read_document
from manybody.workflow.points import expand

ROOT = Path(__file__).parents[2]
TEXTS = [path.read_bytes() for path in sorted((ROOT / "workflows").glob("*.toml"))]
TABLES = {path.name: path.read_bytes() for path in (ROOT / "data").glob("corvane_*.csv")}

VALUES = [
    "0", "-1", "1e400", "nan", "-inf", "true", '""', "[]", "{}", "[[]]", "99999999999999999999", "0.3", "1999-01-01",
    '"/etc/passwd"', '"../../../../etc/shadow"', "'__import__(\"os\").system(\"true\")'", '"1/0"', '"table"', '"all"',
    '"nearest"', "[1, 2, 3]", "[0, 0, 0]", "[[1, 2], [3]]", '["1/2", "1/2"]', '"\\u0000.csv"', '"10**10**10"', '"("',
]  # fmt: skip
SNIPPETS = ["[", "]", '"', "'", "=", ",", "\n", "#", "\\", "[[term]]\n", "[lattice]\n", '"""', "\x00", "é", "🜁", "{"]


def _replace_value(text: bytes, at: float, new: str) -> bytes:
    lines = text.split(b"\n")
    keyed = [k for k, line in enumerate(lines) if b"=" in line and not line.startswith(b"#")]
    if keyed:
        k = keyed[int(at * len(keyed)) % len(keyed)]
        lines[k] = lines[k].split(b"=")[0] + b"= " + new.encode()
    return b"\n".join(lines)


def _drop_line(text: bytes, at: float) -> bytes:
    lines = text.split(b"\n")
    del lines[int(at * len(lines)) % len(lines)]
    return b"\n".join(lines)


def _repeat_line(text: bytes, at: float, to: float) -> bytes:
    lines = text.split(b"\n")
    lines.insert(int(to * len(lines)), lines[int(at * len(lines)) % len(lines)])
    return b"\n".join(lines)


def _insert(text: bytes, at: float, new: bytes) -> bytes:
    k = int(at * len(text))
    return text[:k] + new + text[k:]


def _delete(text: bytes, at: float, length: int) -> bytes:
    k = int(at * len(text))
    return text[:k] + text[k + length :]


place = st.floats(0, 1, exclude_max=True)
mutation = st.one_of(
    st.tuples(st.just(_replace_value), place, st.sampled_from(VALUES)),
    st.tuples(st.just(_drop_line), place),
    st.tuples(st.just(_repeat_line), place, place),
    st.tuples(st.just(_insert), place, st.sampled_from([s.encode() for s in SNIPPETS]) | st.binary(max_size=3)),
    st.tuples(st.just(_delete), place, st.integers(1, 30)),
)
workflows = st.tuples(st.sampled_from(TEXTS), st.lists(mutation, min_size=1, max_size=4))
tables = st.tuples(st.sampled_from(sorted(TABLES)), st.lists(mutation, min_size=1, max_size=3))


def _mutated(text: bytes, mutations) -> bytes:
    for function, *arguments in mutations:
        text = function(text, *arguments)
    return text


OPENED: list[str] = []
WATCHING = False


def _hook(event, arguments):
    if WATCHING and event in ("open", "os.listdir", "os.system", "subprocess.Popen", "exec", "compile"):
        OPENED.append(str(arguments[0]) if event == "open" else f"{event} {arguments[0]!r}")


sys.addaudithook(_hook)  # cannot be taken away again; it does nothing unless WATCHING


def check(folder: Path, workflow: bytes) -> str:
    """Read and expand; returns "valid" or "refused" and asserts everything else that is promised."""
    global WATCHING
    path = folder / "workflows" / "study.toml"
    path.write_bytes(workflow)
    before = sorted(folder.rglob("*"))
    OPENED.clear()
    WATCHING = True
    try:
        expand(read_document(path))
        verdict = "valid"
    except DocumentError as error:
        verdict = "refused"
        assert error.problems and all(problem.place and problem.wrong for problem in error.problems)
        assert "Traceback" not in str(error) and len(str(error)) < 100_000
    finally:
        WATCHING = False
    assert sorted(folder.rglob("*")) == before
    for name in OPENED:
        assert name == str(path) or name.endswith(".csv"), name
    return verdict


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("malformed")
    (folder / "workflows").mkdir()
    (folder / "data").mkdir()
    for name, content in TABLES.items():
        (folder / "data" / name).write_bytes(content)
    for path in sorted((ROOT / "workflows").glob("*.toml")):
        expand(read_document(path))  # not watched yet: imports whatever is imported late
    for text in TEXTS:
        assert check(folder, text) == "valid"
        assert str(folder / "workflows" / "study.toml") in OPENED  # the watch works
    return folder


QUIET = {"deadline": None, "suppress_health_check": [HealthCheck.function_scoped_fixture], "derandomize": True}


@settings(max_examples=150, **QUIET)
@given(workflows)
def test_mutated_workflows(folder, workflow):
    check(folder, _mutated(*workflow))


@pytest.mark.slow
@settings(max_examples=1000, **QUIET)
@given(workflows)
def test_a_thousand_mutated_workflows(folder, workflow):
    check(folder, _mutated(*workflow))


@settings(max_examples=60, **QUIET)
@given(tables)
def test_mutated_tables(folder, table):
    name, mutations = table
    text = next(text for text in TEXTS if b"corvane_pairs" in text)
    (folder / "data" / name).write_bytes(_mutated(TABLES[name], mutations))
    try:
        check(folder, text)
    finally:
        (folder / "data" / name).write_bytes(TABLES[name])

"""The workflow file: read, checked as a whole before anything runs, every problem reported at once.

The text is data only: TOML with values of known kinds, arithmetic through expression.py, and no file is opened but the
tables that a lattice of shape "table" names.
"""

import os
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from manybody.model.lattice import Lattice
from manybody.workflow import schema
from manybody.workflow.entries import (
    TermEntry,
    check_names,
    check_selections,
    check_values,
    read_parameters,
    read_terms,
)
from manybody.workflow.files import read_regular
from manybody.workflow.found import Found
from manybody.workflow.lattices import read_lattices
from manybody.workflow.places import Lines
from manybody.workflow.problems import DocumentError, Problem, nearest, quote

MAX_BYTES = 2**20
MAX_POINTS = 1_000_000
BLOCKS = ("title", "lattice", "term", "parameters", "quantum", "classical", "units")


@dataclass(frozen=True)
class Settings:
    """How the two branches are to work; the same meaning and defaults as in the workflow file."""

    starts: int = 64
    seed: int = 1
    accuracy: float = 1e-7
    max_bond: int = 512
    memory: int = 4 * 2**30
    observables: tuple[str, ...] = ()

    def __post_init__(self):
        object.__setattr__(self, "observables", tuple(sorted(self.observables)))


@dataclass(frozen=True)
class Document:
    """A checked workflow file.

    lattices: (name, one Lattice per size) for each block, the name "" where the file has one block; parameters: name ->
    values; spins, rules as listed; text: the file as it was read, for the dataset.
    """

    source: str
    text: str
    title: str
    lattices: tuple[tuple[str, tuple[Lattice, ...]], ...]
    terms: tuple[TermEntry, ...]
    parameters: Mapping[str, tuple[float, ...]]
    spins: tuple[float, ...]
    rules: tuple[str, ...]
    settings: Settings
    energy_unit: str = "1"


def read_document(path: str | os.PathLike) -> Document:
    """Read and check a workflow file. DocumentError holds every problem found."""
    source = os.fspath(path)
    content, fault = read_regular(path, MAX_BYTES)
    if fault:
        raise DocumentError(source, [Problem("the file", "", fault, "give the path of a workflow file")])
    try:
        decoded = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        problem = Problem("the file", "", "is not UTF-8 text", "save it as UTF-8", line)
        raise DocumentError(source, [problem]) from None
    return parse_document(decoded, Path(path).parent, source)


def parse_document(text: str, folder: str | os.PathLike = ".", source: str = "workflow") -> Document:
    """Check workflow text; tables are looked up in `folder`. DocumentError holds every problem found."""
    data = _toml(text, source)
    found = Found(Lines(text), data)
    for key in data:
        if key not in BLOCKS:
            found.add((key,), "is no key of a workflow file", nearest(key, BLOCKS))
    title = found.read(("title",), schema.title) or Path(source).stem
    lattices = read_lattices(data, Path(folder), found)
    parameters = read_parameters(data, found)
    terms = read_terms(data, found)
    quantum, _ = found.block(schema.QuantumBlock, ("quantum",))
    classical, _ = found.block(schema.ClassicalBlock, ("classical",))
    units, _ = found.block(schema.UnitsBlock, ("units",))
    check_names(parameters, terms, found)
    check_selections(lattices, terms, found)
    sizes = sum(len(sizes) for _, sizes in lattices)
    combinations = 1
    for values in parameters.values():
        combinations *= len(values)
    points = sizes * combinations * len(quantum.spin) * len(quantum.rule)
    if max(points, combinations) > MAX_POINTS:
        found.add((), f"the study has {points} points", f"at most {MAX_POINTS} are allowed; shorten a list")
    else:
        check_values(parameters, terms, found)
    if found.problems:
        raise DocumentError(source, found.problems)
    settings = Settings(
        classical.starts, classical.seed, quantum.accuracy, quantum.max_bond, quantum.memory, quantum.observables
    )
    entries = tuple(entry for _, entry in terms)
    return Document(
        source, text, title, lattices, entries, parameters, quantum.spin, quantum.rule, settings, units.energy
    )  # fmt: skip


def _toml(text: str, source: str) -> dict:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        match = re.search(r"\(at line (\d+), column (\d+)\)$", message)
        line = int(match[1]) if match else text.count("\n") + 1
        column = f"column {match[2]}" if match else "end of the file"
        message = re.sub(r" \(at [^)]*\)$", "", message)
        problem = Problem(
            column, "", f"is not TOML: {quote(message)[1:-1]}", "correct the line or the one before", line
        )
    except RecursionError:
        problem = Problem("the file", "", "is nested too deeply", "no key needs more than three levels")
    except ValueError:  # an integer beyond what Python converts
        problem = Problem("the file", "", "holds a number that is too long", "give numbers of usual length")
    raise DocumentError(source, [problem])

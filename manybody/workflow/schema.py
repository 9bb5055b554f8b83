"""The keys of a workflow file and how the value of each is read, block by block.

Every block is a pydantic model whose keys may all be left out; what must be given together is checked in document.py.
The readers below take plain TOML values and raise Fault or Faults, in the user's words.
"""

import math
import re
from collections.abc import Callable
from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, PlainValidator

from manybody.model.lattice import SHAPES
from manybody.model.quantization import RULES
from manybody.quantum.result import OBSERVABLES
from manybody.workflow.expression import CONSTANTS, FUNCTIONS, ExpressionError, parse
from manybody.workflow.problems import Fault, Faults, each, nearest

MAX_SITES = 2_000_000
MAX_SPIN = 10_000
MAX_ENTRIES = 100_000  # of one list
TABLE = "table"
NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]{0,39}")

_SPIN = re.compile(r"\s*([0-9]{1,7})\s*(/\s*2)?\s*")
_MEMORY = re.compile(r"\s*([0-9]{1,12}(?:\.[0-9]{1,6})?)\s*([kKMGT]?i?B)\s*")
_UNITS = {"B": 1, "kB": 10**3, "KB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12}
_UNITS |= {"kiB": 2**10, "KiB": 2**10, "MiB": 2**20, "GiB": 2**30, "TiB": 2**40}


def kind_of(value: Any) -> str:
    names = {bool: "true or false", int: "a number", float: "a number", str: "text", list: "a list", dict: "a table"}
    return names.get(type(value), "a date or time")


def number(value: Any) -> float:
    """A finite number."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Fault(f"is {kind_of(value)}, not a number")
    try:
        result = float(value)
    except OverflowError:
        result = math.inf
    if not math.isfinite(result):
        raise Fault("is not finite", "give a finite number")
    return result


def coupling(value: Any):
    """A finite number, or arithmetic: a number at once where it names no parameter, else an Expression."""
    if not isinstance(value, str):
        try:
            return number(value)
        except Fault as fault:
            raise Fault(fault.wrong, "give a number, or arithmetic in parameters as text") from None
    try:
        expression = parse(value)
        return expression if expression.names else expression({})
    except ExpressionError as error:
        raise Fault(str(error), "write plain arithmetic in numbers and parameters") from None


def constant(value: Any) -> float:
    """A finite number, or arithmetic without parameters."""
    result = coupling(value)
    if isinstance(result, float):
        return result
    raise Fault(f"uses {', '.join(sorted(result.names))}", "the value of a parameter takes numbers only")


def whole(low: int, high: int, what: str) -> Callable[[Any], int]:
    def read(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise Fault(f"is {kind_of(value)}", f"{what} is a whole number from {low} to {high}")
        remedy = f"{what} is a whole number from {low} to {high}"
        if not low <= value <= high:
            raise Fault("is out of range" if value == value else "is not finite", remedy)
        if value != int(value):
            raise Fault("is no whole number", remedy)
        return int(value)

    return read


def text(longest: int, what: str) -> Callable[[Any], str]:
    def read(value: Any) -> str:
        if not isinstance(value, str):
            raise Fault(f"is {kind_of(value)}", f"{what} is text")
        if not value.strip() or len(value) > longest or not value.isprintable():
            raise Fault("cannot be used", f"{what} is one line of 1 to {longest} characters")
        return value.strip()

    return read


def choice(allowed: tuple[str, ...], what: str) -> Callable[[Any], str]:
    def read(value: Any) -> str:
        if not isinstance(value, str):
            raise Fault(f"is {kind_of(value)}", f"{what} is one of {', '.join(allowed)}")
        if value not in allowed:
            raise Fault(f"is no {what}", nearest(value, allowed))
        return value

    return read


def several(read: Callable[[Any], Any], what: str, empty: bool = False) -> Callable[[Any], tuple]:
    """A list, or a single value in its place; without repetition."""

    def read_all(value: Any) -> tuple:
        if not isinstance(value, list):
            return (read(value),)
        if not value and not empty:
            raise Fault("is empty", f"give at least one {what}")
        if len(value) > MAX_ENTRIES:
            raise Fault(f"has {len(value)} entries", f"at most {MAX_ENTRIES} are allowed")
        result, faults, seen = [], [], set()
        for index, entry in enumerate(value):
            try:
                (read_entry,) = each([entry], read)
            except Faults as several:
                faults += [Fault(f.wrong, f.remedy, f.value, (index, *f.inside[1:])) for f in several.faults]
                continue
            if read_entry in seen:
                faults.append(Fault(f"repeats a {what}", "name each once", entry, (index,)))
            seen.add(read_entry)
            result.append(read_entry)
        if faults:
            raise Faults(faults)
        return tuple(result)

    return read_all


def spin_number(value: Any) -> float:
    remedy = 'a spin is a positive multiple of 1/2: write 2, "3/2" or 1.5'
    if isinstance(value, str):
        match = _SPIN.fullmatch(value)
        if not match:
            raise Fault("is no spin", remedy)
        result = int(match[1]) / (2 if match[2] else 1)
    else:
        try:
            result = number(value)
        except Fault as fault:
            raise Fault(fault.wrong, remedy) from None
    if result <= 0 or 2 * result != int(2 * result):
        raise Fault("is no spin", remedy)
    if result > MAX_SPIN:
        raise Fault("is too large", f"spins up to {MAX_SPIN} are allowed")
    return result


def memory_bytes(value: Any) -> int:
    remedy = 'write "4 GiB" or "500 MB", at least 1 MiB'
    if isinstance(value, str):
        match = _MEMORY.fullmatch(value)
        if not match or match[2] not in _UNITS:
            raise Fault("is no amount of memory", remedy)
        amount = float(match[1]) * _UNITS[match[2]]
    else:
        amount = number(value)
    if not 2**20 <= amount <= 2**60:
        raise Fault("is out of range", remedy)
    return int(amount)


def accuracy_number(value: Any) -> float:
    result = number(value)
    if not 0 < result < 1:
        raise Fault("is out of range", "a relative accuracy lies between 0 and 1, for example 1e-7")
    return result


_extent_entry = whole(1, MAX_SITES, "a number of cells")


def extent(value: Any) -> tuple[int, ...]:
    if not isinstance(value, list) or not value or len(value) > 3:
        raise Fault("is no extent", "an extent lists the cells along each direction, for example [4, 4]")
    return each(value, _extent_entry)


def extents(value: Any) -> tuple[tuple[int, ...], ...]:
    if isinstance(value, list) and value and not any(isinstance(entry, list) for entry in value):
        return (extent(value),)
    return several(extent, "extent")(value)


def periodic_flags(value: Any) -> bool | tuple[bool, ...]:
    remedy = "write true or false, or one of them for each direction: [true, false]"
    if isinstance(value, bool):
        return value
    if isinstance(value, list) and 0 < len(value) <= 3 and all(isinstance(entry, bool) for entry in value):
        return tuple(value)
    raise Fault(f"is {kind_of(value)}" if not isinstance(value, list) else "is not a list of true or false", remedy)


_site_entry = whole(0, MAX_SITES - 1, "a site number")


def site_selection(value: Any) -> str | tuple[int, ...]:
    if isinstance(value, str):
        return choice(("every", "even", "odd"), "selection of sites")(value)
    return several(_site_entry, "site")(value)


def vector(value: Any) -> tuple:
    if not isinstance(value, list) or len(value) != 3:
        raise Fault("is not a list of three", "give the x, y and z component")
    return each(value, coupling)


def exchange_values(value: Any) -> tuple | str:
    """1, 3 or 9 couplings, row by row; or "table"."""
    if value == TABLE:
        return TABLE
    if not isinstance(value, list):
        return (coupling(value),)
    if len(value) == 3 and all(isinstance(row, list) for row in value):
        return sum(each(value, vector), ())
    if len(value) == 3 and not any(isinstance(row, list) for row in value):
        return each(value, coupling)
    raise Fault(
        "is no exchange",
        'give a number, three numbers [Jx, Jy, Jz], a 3 x 3 matrix as three lists of three, or "table"',
    )


def single(value: Any) -> tuple:
    return (coupling(value),)


def _read(reader: Callable[[Any], Any]) -> Any:
    return Annotated[Any, PlainValidator(reader)]


class Block(BaseModel):
    """Keys that are not listed in a block are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class LatticeBlock(Block):
    shape: _read(choice(SHAPES, "shape")) = None
    name: _read(text(60, "a name")) = None
    sites: _read(several(whole(1, MAX_SITES, "a number of sites"), "number of sites")) = None
    extent: _read(extents) = None
    periodic: _read(periodic_flags) = False
    pairs: _read(text(1000, "a path")) = None
    positions: _read(text(1000, "a path")) = None


class TermBlock(Block):
    pair: _read(text(40, "a selection of pairs")) = None
    site: _read(site_selection) = None
    exchange: _read(exchange_values) = None
    antisymmetric: _read(vector) = None
    biquadratic: _read(single) = None
    field: _read(vector) = None
    axis: _read(vector) = None
    anisotropy: _read(single) = None


class QuantumBlock(Block):
    spin: _read(several(spin_number, "spin")) = (0.5, 1.0, 1.5, 2.0)
    rule: _read(several(choice(RULES, "rule"), "rule")) = ("substitution",)
    accuracy: _read(accuracy_number) = 1e-7
    max_bond: _read(whole(1, 100_000, "a bond dimension")) = 512
    memory: _read(memory_bytes) = 4 * 2**30
    observables: _read(several(choice(OBSERVABLES, "observable"), "observable", empty=True)) = ()


class ClassicalBlock(Block):
    starts: _read(whole(1, 1_000_000, "the number of starts")) = 64
    seed: _read(whole(0, 2**32 - 1, "a seed")) = 1


class UnitsBlock(Block):
    energy: _read(text(30, "a unit")) = "1"


parameter_values = several(constant, "value")
title = text(200, "a title")


def parameter_name_fault(name: str, taken: frozenset[str]) -> str:
    """Why a parameter cannot have this name, or ""."""
    if not NAME.fullmatch(name):
        return "is no name for a parameter: a letter, then at most 39 letters, digits or _"
    if name in taken or name == TABLE:
        return "is a name the dataset or the workflow file needs itself"
    if name in FUNCTIONS or name in CONSTANTS:
        return "is the name of a function or constant of the arithmetic"
    return ""

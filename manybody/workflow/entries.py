"""The [[term]] blocks and the parameters of a workflow file, and whether they fit each other and the lattices."""

import itertools
from collections.abc import Mapping
from dataclasses import dataclass

from manybody.model.lattice import Lattice
from manybody.model.terms import PAIR_KINDS, TABLE, Term, unit_axis
from manybody.results.schema import GROUPS, RESERVED_NAMES, VARIABLES
from manybody.workflow import schema
from manybody.workflow.expression import Expression, ExpressionError
from manybody.workflow.found import Found
from manybody.workflow.problems import nearest

KINDS = ("exchange", "antisymmetric", "biquadratic", "field", "anisotropy")
RESERVED = frozenset(RESERVED_NAMES) | VARIABLES.keys() | set(GROUPS) | {"scaling"}


@dataclass(frozen=True)
class TermEntry:
    """A [[term]] block; its numbers may still be arithmetic in parameters. `where` None: the default of the lattice."""

    kind: str
    where: str | tuple[int, ...] | None
    values: tuple[float | Expression, ...] | str
    axis: tuple[float | Expression, ...] = ()

    @property
    def names(self) -> frozenset[str]:
        """The parameters it depends on."""
        entries = self.axis if self.values == TABLE else (*self.values, *self.axis)
        return frozenset().union(*(entry.names for entry in entries if isinstance(entry, Expression)))

    def selection(self, lattice: Lattice) -> str | tuple[int, ...]:
        if self.where is not None:
            return self.where
        if self.kind not in PAIR_KINDS:
            return "every"
        return "all" if lattice.table is not None else "nearest"

    def at(self, lattice: Lattice, parameters: Mapping[str, float]) -> Term:
        """The term with its numbers put in. ExpressionError or ValueError where it has none."""

        def put_in(entries):
            return tuple(entry(parameters) if isinstance(entry, Expression) else entry for entry in entries)

        values = self.values if self.values == TABLE else put_in(self.values)
        return Term(self.kind, self.selection(lattice), values, put_in(self.axis))


def read_parameters(data: dict, found: Found) -> dict[str, tuple[float, ...]]:
    block = data.get("parameters", {})
    if not isinstance(block, dict):
        found.add(("parameters",), f"is {schema.kind_of(block)}", "write [parameters] and below it name = [values]")
        return {}
    parameters = {}
    for name in block:
        if reason := schema.parameter_name_fault(name, RESERVED):
            found.add(("parameters", name), reason, "choose another name")
        values = found.read(("parameters", name), schema.parameter_values)
        parameters[name] = values if values is not None else ()
    return parameters


def read_terms(data: dict, found: Found) -> list[tuple[tuple, TermEntry | None]]:
    """(path, entry) for each term block; None for one that could not be read."""
    raw = data.get("term", [])
    if isinstance(raw, dict):
        paths = [("term",)]
    elif isinstance(raw, list):
        paths = [("term", index) for index in range(len(raw))]
    else:
        found.add(("term",), f"is {schema.kind_of(raw)}", "write one [[term]] block for each term")
        return []
    if not paths:
        found.add((), "there is no term", "add a [[term]] block, for example with exchange = 1.0")
    return [(path, _term(path, found)) for path in paths]


def _term(path: tuple, found: Found) -> TermEntry | None:
    block, bad = found.block(schema.TermBlock, path)
    given = block.model_fields_set | bad
    kinds = [kind for kind in KINDS if kind in given]
    if not kinds:
        if not bad:
            found.add(path, "names no coupling", f"give one of {', '.join(KINDS)}", value=None)
        return None
    if len(kinds) > 1:
        found.add(path, f"has {' and '.join(kinds)} in one block", "write a [[term]] block for each", value=None)
        return None
    kind = kinds[0]
    selects, other = ("pair", "site") if kind in PAIR_KINDS else ("site", "pair")
    if other in given:
        found.add((*path, other), f"does not go with {kind}", f"{kind} is summed over a {selects}")
    if "axis" in given and kind != "anisotropy":
        found.add((*path, "axis"), f"does not go with {kind}", "only anisotropy has an axis")
    if given & bad or other in given:
        return None
    axis = (block.axis or (0.0, 0.0, 1.0)) if kind == "anisotropy" else ()
    return TermEntry(kind, getattr(block, selects), getattr(block, kind), axis)


def check_names(parameters: dict, terms: list, found: Found) -> None:
    used, unknown = set(), False
    for path, entry in terms:
        for key, position, expression in _expressions(path, entry, found):
            used |= expression.names
            for name in sorted(expression.names - parameters.keys()):
                unknown = True
                listed = nearest(name, parameters) if parameters else "the file has no [parameters]"
                found.add((*path, key, *position), f'uses "{name[:40]}", which is no parameter', listed)
    # A term that is not understood, or a wrong name, may be where an unused parameter was meant to stand.
    if not unknown and all(entry is not None for _, entry in terms):
        for name in parameters.keys() - used:
            if schema.parameter_name_fault(name, RESERVED):
                continue
            found.add(("parameters", name), "is used by no term", "remove it, or use it in a coupling")


def _expressions(path: tuple, entry: TermEntry | None, found: Found):
    """(key, position within its value, Expression) for the arithmetic of one term."""
    if entry is None:
        return
    for key, values in ((entry.kind, entry.values), ("axis", entry.axis)):
        if values == TABLE:
            continue
        nested = len(values) == 9
        for index, value in enumerate(values):
            if isinstance(value, Expression):
                position = (index // 3, index % 3) if nested else (index,) if len(values) > 1 else ()
                yield key, position, value


def check_selections(lattices: tuple, terms: list, found: Found) -> None:
    """Every term must find its pairs or sites on every lattice; and some, somewhere."""
    for path, entry in terms:
        if entry is None:
            continue
        key = "pair" if entry.kind in PAIR_KINDS else "site"
        at = (*path, key) if entry.where is not None else path
        value = ... if entry.where is not None else None
        count, faulty = 0, not lattices
        for _, sizes in lattices:
            for lattice in sizes:
                try:
                    count += _count(entry, lattice)
                except ValueError as error:
                    wrong, _, remedy = str(error).partition("; ")
                    found.add(at, wrong, remedy or "correct the selection or the lattice", value)
                    faulty = True
                    break
        if entry.values == TABLE and not faulty:
            for _, sizes in lattices:
                for lattice in sizes[:1]:
                    if lattice.table is None or not lattice.table.exchange:
                        found.add(
                            (*path, "exchange"),
                            f"{lattice.describe()} has no exchange column",
                            "give numbers, or a table of pairs with a column exchange",
                        )
        if count == 0 and not faulty:
            found.add(
                at, "selects nothing on any lattice of the study", "enlarge the lattice or remove the term", value
            )


def _count(entry: TermEntry, lattice: Lattice) -> int:
    where = entry.selection(lattice)
    if entry.kind not in PAIR_KINDS:
        return lattice.sites if where == "every" else len(lattice.select_sites(where))
    if lattice.table is not None:
        return len(lattice.pairs(where))  # "all" of a table can fail in the making
    return lattice.count_pairs(where)


def check_values(parameters: dict, terms: list, found: Found) -> None:
    """Arithmetic must have a finite value, and an axis a direction, at every combination of the parameters it uses."""
    for path, entry in terms:
        if entry is None:
            continue
        sound = True
        for key, position, expression in _expressions(path, entry, found):
            if not expression.names <= parameters.keys():
                continue  # check_names tells of it
            for values in _combinations(expression.names, parameters):
                try:
                    expression(values)
                except ExpressionError as error:
                    found.add(
                        (*path, key, *position), f"{error}{_where(values)}", "change the arithmetic or the values"
                    )
                    sound = sound and key != "axis"
                    break
        if sound:
            _check_axis(path, entry, parameters, found)


def _check_axis(path: tuple, entry: TermEntry, parameters: dict, found: Found) -> None:
    if not entry.axis:
        return
    names = frozenset().union(*(x.names for x in entry.axis if isinstance(x, Expression)))
    if not names <= parameters.keys():
        return
    for values in _combinations(names, parameters):
        try:
            unit_axis([x(values) if isinstance(x, Expression) else x for x in entry.axis])
        except ValueError as error:
            found.add((*path, "axis"), f"{error}{_where(values)}", "give a direction, for example [0, 0, 1]")
            return


def _combinations(names: frozenset[str], parameters: dict):
    ordered = sorted(names)
    for values in itertools.product(*(parameters[name] for name in ordered)):
        yield dict(zip(ordered, values, strict=True))


def _where(values: dict) -> str:
    return " at " + ", ".join(f"{name} = {value:g}" for name, value in values.items()) if values else ""

"""Reads values out of a workflow file's data and gathers what is wrong with them, each with its place and line."""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from pydantic import ValidationError

from manybody.workflow import schema
from manybody.workflow.places import Lines
from manybody.workflow.problems import Fault, Faults, Problem, nearest, quote

_MISSING = object()


class Found:
    """Collects problems while blocks are read, and knows where in the file each key stands."""

    def __init__(self, lines: Lines, data: Mapping[str, Any]):
        self.lines, self.data, self.problems = lines, data, []

    def raw(self, path: tuple) -> Any:
        value = self.data
        for step in path:
            try:
                value = value[step]
            except (KeyError, IndexError, TypeError):
                return _MISSING
        return value

    def add(self, path: tuple, wrong: str, remedy: str = "", value: Any = ...) -> None:
        if value is ...:
            value = self.raw(path) if path else _MISSING
        shown = "" if value is _MISSING or value is None else quote(value)
        self.problems.append(Problem(place(path), shown, wrong, remedy, self.lines.of(path)))

    def add_problem(self, problem: Problem, path: tuple) -> None:
        """A problem of a table that the key at `path` names."""
        self.problems.append(replace(problem, line=self.lines.of(path)))

    def read(self, path: tuple, reader) -> Any:
        """The value at a path through a reader; None where there is none or it is faulty."""
        value = self.raw(path)
        if value is _MISSING:
            return None
        try:
            return reader(value)
        except Fault as fault:
            self._add_fault(path, fault)
        except Faults as several:
            for fault in several.faults:
                self._add_fault(path, fault)
        return None

    def block(self, model: type[schema.Block], path: tuple) -> tuple[schema.Block, frozenset[str]]:
        """A block with its good keys, and the names of its faulty ones."""
        raw = self.raw(path)
        if raw is _MISSING:
            return model(), frozenset()
        if not isinstance(raw, dict):
            self.add(path, f"is {schema.kind_of(raw)}", f"write a block with the keys {', '.join(model.model_fields)}")
            return model(), frozenset(model.model_fields)
        try:
            return model.model_validate(raw), frozenset()
        except ValidationError as error:
            bad = set()
            for entry in error.errors(include_url=False):
                key = str(entry["loc"][0])
                bad.add(key)
                fault = entry.get("ctx", {}).get("error")
                if isinstance(fault, Faults):
                    for single in fault.faults:
                        self._add_fault((*path, key), single)
                elif isinstance(fault, Fault):
                    self._add_fault((*path, key), fault)
                else:
                    self.add((*path, key), "is no key of this block", nearest(key, model.model_fields))
        good = {key: value for key, value in raw.items() if key in model.model_fields and key not in bad}
        return model.model_validate(good), frozenset(bad)

    def _add_fault(self, path: tuple, fault: Fault) -> None:
        self.add((*path, *fault.inside), fault.wrong, fault.remedy, fault.value)


def place(path: tuple) -> str:
    """("term", 1, "exchange", 0, 2) -> 'term 2: exchange, entry 1, 3'. Counted from 1, as people do."""
    if not path:
        return "the file"
    head, rest = quote(str(path[0]))[1:-1], list(path[1:])
    if rest and isinstance(rest[0], int) and head in ("term", "lattice"):
        head += f" {rest.pop(0) + 1}"
    keys = [quote(str(step))[1:-1] for step in rest if isinstance(step, str)]
    entries = [str(step + 1) for step in rest if isinstance(step, int)]
    text = f"{head}: {'.'.join(keys)}" if keys else head
    return f"{text}, entry {', '.join(entries)}" if entries else text

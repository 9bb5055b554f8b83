"""What can be wrong with a workflow file, said so that it can be put right: place, value, what is wrong, remedy."""

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

QUOTED = 60  # characters of a value that a message repeats at most


@dataclass(frozen=True)
class Problem:
    """One fault. `place` is a key path ("term 2: exchange") or a place in a file, `value` the text found there."""

    place: str
    value: str
    wrong: str
    remedy: str = ""
    line: int | None = None

    def __str__(self) -> str:
        start = f"line {self.line}, " if self.line else ""
        value = f" = {self.value}" if self.value else ""
        remedy = f"; {self.remedy}" if self.remedy else ""
        return f"{start}{self.place}{value}: {self.wrong}{remedy}"


class DocumentError(ValueError):
    """A workflow file that cannot be run, with all its problems at once."""

    def __init__(self, source: str, problems: Iterable[Problem]):
        self.source = source
        self.problems = tuple(sorted(set(problems), key=lambda p: (p.line or 0, p.place, p.wrong)))
        super().__init__(source, self.problems)

    def __str__(self) -> str:
        count = len(self.problems)
        head = f"{self.source}: {count} problem{'s' if count != 1 else ''}"
        return "\n".join([head, *(f"  {problem}" for problem in self.problems)])

    def __reduce__(self):
        return (DocumentError, (self.source, self.problems))


class Fault(ValueError):
    """Raised by the reader of one value; `inside` is the path of the faulty entry within it, counted from 0."""

    def __init__(self, wrong: str, remedy: str = "", value: Any = ..., inside: Sequence[int] = ()):
        super().__init__(wrong)
        self.wrong, self.remedy, self.value, self.inside = wrong, remedy, value, tuple(inside)

    def within(self, index: int) -> "Fault":
        return Fault(self.wrong, self.remedy, self.value, (index, *self.inside))


class Faults(ValueError):
    """Several faults of one value."""

    def __init__(self, faults: Iterable[Fault]):
        self.faults = tuple(faults)
        super().__init__(f"{len(self.faults)} faults")


def each(values: Sequence, read) -> tuple:
    """read(value) for every entry; all faults together, each with its index."""
    results, faults = [], []
    for index, value in enumerate(values):
        try:
            results.append(read(value))
        except Fault as fault:
            faults.append(replace_value(fault, value).within(index))
        except Faults as several:
            faults += [replace_value(fault, value).within(index) for fault in several.faults]
    if faults:
        raise Faults(faults)
    return tuple(results)


def replace_value(fault: Fault, value: Any) -> Fault:
    """The fault with the value it is about, where it did not name one itself."""
    return fault if fault.value is not ... else Fault(fault.wrong, fault.remedy, value, fault.inside)


def quote(value: Any) -> str:
    """A value as a workflow file would show it, shortened, without control characters."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and value.bit_length() > 300:
        return "a very long number"
    if isinstance(value, str):
        text = '"' + "".join(c if c.isprintable() else repr(c)[1:-1] for c in value[: QUOTED + 1]) + '"'
        shortened = len(value) > QUOTED
    elif isinstance(value, list | tuple):
        shown = []
        for entry in value[:20]:
            shown.append(quote(entry))
            if sum(map(len, shown)) > QUOTED:
                break
        text, shortened = f"[{', '.join(shown)}{', ...' if len(shown) < len(value) else ''}]", False
    elif isinstance(value, dict):
        return "a table" if value else "an empty table"
    else:
        text = "".join(c if c.isprintable() else "?" for c in str(value))
        shortened = False
    if shortened or len(text) > 2 * QUOTED:
        text = text[:QUOTED] + " ..."
    return text


def nearest(name: str, allowed: Iterable[str]) -> str:
    """'did you mean "spin"? Allowed: ...' for an unknown name."""
    allowed = list(allowed)
    close = difflib.get_close_matches(name[:QUOTED].lower(), allowed, n=1, cutoff=0.6)
    listed = ", ".join(allowed) if len(allowed) <= 30 else ", ".join([*allowed[:30], "..."])
    return (f'did you mean "{close[0]}"? ' if close else "") + f"allowed: {listed}"

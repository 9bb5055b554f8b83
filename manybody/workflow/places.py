"""On which line of a TOML text a key stands. tomllib does not say, and a message without a line makes people search.

Only for text that tomllib has read already: the scan takes its correctness for granted, and whatever it does not
follow (keys inside inline tables) is placed at the key around it.
"""

import contextlib
import re

Path = tuple[str | int, ...]

_KEY = re.compile(r"""\s*(?:(?P<bare>[A-Za-z0-9_-]+)|"(?P<basic>(?:[^"\\\n]|\\.)*)"|'(?P<literal>[^'\n]*)')\s*""")
_VALUE = re.compile(
    r'"""(?:[^\\]|\\.)*?"{3,5}'
    r"|'''.*?'{3,5}"
    r'|"(?:[^"\\\n]|\\.)*"'
    r"|'[^'\n]*'"
    r"|#[^\n]*|[\[\]{}]|\n|[^\"'#\[\]{}\n]+",
    re.DOTALL,
)


class Lines:
    """Line numbers, from 1, by key path; tables of an array by their number, from 0: ("term", 1, "exchange")."""

    def __init__(self, text: str):
        self.found: dict[Path, int] = {}
        self._counts: dict[Path, int] = {}
        with contextlib.suppress(AttributeError, IndexError):  # not followed to the end: what was found is right
            self._scan(text)

    def of(self, path: Path) -> int | None:
        """Line of the key, or of the closest key around it; None for the document as a whole."""
        for length in range(len(path), 0, -1):
            if path[:length] in self.found:
                return self.found[path[:length]]
        return None

    def _scan(self, text: str) -> None:
        text = text.replace("\r\n", "\n")
        at, line, table = 0, 1, ()
        while at < len(text):
            if text[at] == "\n":
                at, line = at + 1, line + 1
            elif text[at] in " \t":
                at += 1
            elif text[at] == "#":
                at = self._end_of_line(text, at)
            elif text[at] == "[":
                table = self._header(text, at, line)
                at = self._end_of_line(text, at)
            else:
                keys, at = self._keys(text, at)
                for length in range(1, len(keys) + 1):
                    self.found.setdefault((*table, *keys[:length]), line)
                end = self._skip_value(text, at + 1)
                line += text.count("\n", at, end)
                at = end

    def _header(self, text: str, at: int, line: int) -> Path:
        several = text.startswith("[[", at)
        keys, _ = self._keys(text, at + 1 + several)
        path: Path = ()
        for key in keys[:-1]:
            path = self._last((*path, key))
        path = (*path, keys[-1])
        self.found.setdefault(path, line)
        if several:
            self._counts[path] = self._counts.get(path, -1) + 1
            path = (*path, self._counts[path])
            self.found[path] = line
        return path

    def _last(self, path: Path) -> Path:
        return (*path, self._counts[path]) if path in self._counts else path

    @staticmethod
    def _keys(text: str, at: int) -> tuple[list[str], int]:
        keys = []
        while True:
            match = _KEY.match(text, at)
            keys.append(next(group for group in match.groups() if group is not None))
            at = match.end()
            if text[at] != ".":
                return keys, at
            at += 1

    @staticmethod
    def _skip_value(text: str, at: int) -> int:
        """Position of the newline that ends a value."""
        depth = 0
        while at < len(text):
            piece = _VALUE.match(text, at).group()
            if piece == "\n" and depth == 0:
                return at
            depth += {"[": 1, "{": 1, "]": -1, "}": -1}.get(piece, 0)
            at += len(piece)
        return at

    @staticmethod
    def _end_of_line(text: str, at: int) -> int:
        end = text.find("\n", at)
        return len(text) if end < 0 else end

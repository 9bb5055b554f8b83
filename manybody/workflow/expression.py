"""Plain arithmetic in parameters, as couplings of a workflow file may use it: "2*d + sqrt(3)/2".

A reader of its own, so that workflow text can never run code. It knows numbers, parameter names, + - * / **,
parentheses, pi and the functions below, and nothing else. Everything is a float; length and nesting are bounded.

    sum     = product (("+" | "-") product)*
    product = signed (("*" | "/") signed)*
    signed  = ("+" | "-") signed | power
    power   = atom ("**" signed)?                so that -2**2 = -4 and 2**-1 = 0.5
    atom    = number | name | function "(" sum ")" | "(" sum ")"
"""

import math
import operator
import re
from collections.abc import Mapping
from dataclasses import dataclass

FUNCTIONS = {
    "sqrt": math.sqrt,
    "sin": math.sin,
    "cos": math.cos,
    "tan": math.tan,
    "exp": math.exp,
    "log": math.log,
    "abs": math.fabs,
}
CONSTANTS = {"pi": math.pi}
MAX_LENGTH = 200
MAX_DEPTH = 25

_OPERATIONS = {
    "+": operator.add,
    "-": operator.sub,
    "*": operator.mul,
    "/": operator.truediv,
    "**": math.pow,
}
_TOKEN = re.compile(
    r"(?P<number>(?:[0-9]{1,40}\.?[0-9]{0,40}|\.[0-9]{1,40})(?:[eE][+-]?[0-9]{1,4})?)"
    r"|(?P<name>[A-Za-z_][A-Za-z0-9_]*)|(?P<sign>\*\*|[-+*/()])"
)


class ExpressionError(ValueError):
    """Arithmetic that cannot be read or has no finite value."""


@dataclass(frozen=True)
class Expression:
    """Arithmetic that was read: `names` are the parameters it needs. Made by `parse`."""

    text: str
    names: frozenset[str]
    tree: tuple

    def __call__(self, parameters: Mapping[str, float]) -> float:
        """Its value. ExpressionError: division by zero, a root of a negative number, overflow."""
        try:
            value = _evaluate(self.tree, parameters)
        except ZeroDivisionError:
            raise ExpressionError("divides by zero") from None
        except OverflowError:
            raise ExpressionError("is too large a number") from None
        except ValueError:
            raise ExpressionError("has no real value (root, logarithm or broken power of a wrong number)") from None
        if not math.isfinite(value):
            raise ExpressionError("is not a finite number")
        return value


def parse(text: str) -> Expression:
    """Read arithmetic. ExpressionError says what is wrong with the text; names are not looked up here."""
    if len(text) > MAX_LENGTH:
        raise ExpressionError(f"has {len(text)} characters; at most {MAX_LENGTH} are read")
    reader = _Reader(_tokens(text))
    tree = reader.sum(0)
    if reader.kind != "end":
        raise ExpressionError(f"has '{reader.token}' where it should go on with + - * / ** or end")
    return Expression(text.strip(), frozenset(reader.names), tree)


def _tokens(text: str) -> list[tuple[str, str]]:
    tokens, at = [], 0
    while at < len(text):
        if text[at] in " \t":
            at += 1
            continue
        match = _TOKEN.match(text, at)
        if match is None:
            hint = "; write ** for a power" if text[at] == "^" else ""
            raise ExpressionError(f"has the character {text[at]!r}, which is no arithmetic{hint}")
        tokens.append((match.lastgroup, match.group()))
        at = match.end()
    return [*tokens, ("end", "")]


class _Reader:
    """Recursive descent over the tokens; every nesting passes through `signed`, where the depth is bounded."""

    def __init__(self, tokens: list[tuple[str, str]]):
        self.tokens, self.at, self.names = tokens, 0, set()

    @property
    def kind(self) -> str:
        return self.tokens[self.at][0]

    @property
    def token(self) -> str:
        return self.tokens[self.at][1]

    def take(self) -> str:
        self.at += 1
        return self.tokens[self.at - 1][1]

    def sum(self, depth: int) -> tuple:
        tree = self.product(depth)
        while self.token in ("+", "-"):
            tree = (self.take(), tree, self.product(depth))
        return tree

    def product(self, depth: int) -> tuple:
        tree = self.signed(depth)
        while self.token in ("*", "/"):
            tree = (self.take(), tree, self.signed(depth))
        return tree

    def signed(self, depth: int) -> tuple:
        if depth > MAX_DEPTH:
            raise ExpressionError(f"is nested deeper than {MAX_DEPTH} levels")
        if self.token in ("+", "-"):
            return ("signed", self.take(), self.signed(depth + 1))
        base = self.atom(depth)
        if self.token == "**":
            return (self.take(), base, self.signed(depth + 1))
        return base

    def atom(self, depth: int) -> tuple:
        kind, token = self.kind, self.take()
        if kind == "number":
            return ("number", float(token))
        if token == "(":
            return self.closed(depth)
        if kind == "name":
            if self.token == "(":
                if token not in FUNCTIONS:
                    raise ExpressionError(f"calls '{token}'; the functions are {', '.join(FUNCTIONS)}")
                self.take()
                return ("call", token, self.closed(depth))
            if token in FUNCTIONS:
                raise ExpressionError(f"names the function '{token}' without parentheses")
            if token in CONSTANTS:
                return ("number", CONSTANTS[token])
            self.names.add(token)
            return ("name", token)
        self.at -= 1
        found = f"'{token}'" if token else "nothing"
        raise ExpressionError(f"has {found} where a number, a parameter or a parenthesis should stand")

    def closed(self, depth: int) -> tuple:
        tree = self.sum(depth + 1)
        if self.token != ")":
            raise ExpressionError("has a parenthesis that is not closed")
        self.take()
        return tree


def _evaluate(tree: tuple, parameters: Mapping[str, float]) -> float:
    kind = tree[0]
    if kind == "number":
        return tree[1]
    if kind == "name":
        return float(parameters[tree[1]])
    if kind == "call":
        return FUNCTIONS[tree[1]](_evaluate(tree[2], parameters))
    if kind == "signed":
        value = _evaluate(tree[2], parameters)
        return -value if tree[1] == "-" else value
    return _OPERATIONS[kind](_evaluate(tree[1], parameters), _evaluate(tree[2], parameters))

"""Formulas of the user's as checked, frozen trees. Nothing in a formula is ever evaluated as code.

A formula is arithmetic over names of layers: bands by role (`nir`), other features (`ndvi`), either of one date
(`nir@2024_06`). Strongest first: `^` (power, from the right), unary minus, `* /`, `+ -`, one comparison, `not`, `and`,
`or`; functions are listed in `FUNCTIONS`. Conditions are numbers, 1 where true and 0 where false.

Invalid pixels are NaN and stay NaN through every operation, comparisons included; what has no finite value (division
by zero, the logarithm of a negative number, overflow) is NaN, never infinite.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray

from classify.errors import SettingsError
from classify.features.program import Call, Name, Node, Number, Program

MAX_LENGTH = 4000
MAX_DEPTH = 100

# Name of a function: least and greatest number of values that it takes (None: any number).
FUNCTIONS: Mapping[str, tuple[int, int | None]] = {
    "where": (3, 3), "min": (2, None), "max": (2, None), "mean": (2, None), "abs": (1, 1), "sign": (1, 1),
    "sqrt": (1, 1), "cbrt": (1, 1), "log": (1, 1), "log10": (1, 1), "exp": (1, 1),
    "sin": (1, 1), "cos": (1, 1), "tan": (1, 1), "asin": (1, 1), "acos": (1, 1), "atan": (1, 1), "atan2": (2, 2),
}  # fmt: skip
CONSTANTS: Mapping[str, float] = {"pi": math.pi}
_WORDS = ("and", "or", "not")

_TOKEN = re.compile(
    r"(?P<space>\s+)"
    r"|(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
    r"|(?P<name>[A-Za-z_][A-Za-z0-9_]*(?:@[A-Za-z0-9_]+)?)"
    r"|(?P<sign><=|>=|==|!=|[-+*/^<>(),])"
)
_BINARY: Mapping[str, tuple[int, int, str]] = {  # sign: binding power to the left, to the right, operation
    "or": (1, 2, "or"), "and": (3, 4, "and"),
    "<": (7, 8, "less"), "<=": (7, 8, "less_equal"), ">": (7, 8, "greater"), ">=": (7, 8, "greater_equal"),
    "==": (7, 8, "equal"), "!=": (7, 8, "not_equal"),
    "+": (9, 10, "add"), "-": (9, 10, "subtract"), "*": (11, 12, "multiply"), "/": (11, 12, "divide"),
    "^": (16, 15, "power"),
}  # fmt: skip
_NOT_POWER, _MINUS_POWER, _COMPARISON_POWER = 5, 13, 7
_HINTS = {
    "=": "write == to compare", "&": "write 'and'", "|": "write 'or'", "!": "write 'not'", "~": "write 'not'",
    "[": "use round brackets", "{": "use round brackets", "−": "use the plain hyphen-minus -", "×": "write *",
    "·": "write *", "÷": "write /", "–": "use the plain hyphen-minus -",
    "@": "a date follows a name, as in nir@2024_06",
}  # fmt: skip


class FormulaError(SettingsError):
    """A formula that cannot be read. `reason` says why; `position` is the character it points at, from 0."""

    def __init__(self, text: str, reason: str, position: int) -> None:
        self.text, self.reason, self.position = text, reason, position
        super().__init__(f"{reason}\n{point_at(text, position)}")


def point_at(text: str, position: int) -> str:
    """The line of `text` that holds the character at `position` (from 0), with a caret below it; two lines."""
    start = text.rfind("\n", 0, position) + 1
    end = text.find("\n", position)
    line, column = text[start : end if end >= 0 else None].replace("\t", " "), position - start
    first = max(0, column - 60)  # a long formula is shown around the place
    shown = ("…" if first else "") + line[first : first + 100] + ("…" if len(line) > first + 100 else "")
    return f"    {shown}\n    {' ' * (column - first + bool(first))}^"


@dataclass(frozen=True, slots=True)
class Formula:
    """A formula that has been read. text: as written. root: its tree."""

    text: str
    root: Node

    @property
    def names(self) -> tuple[str, ...]:
        """The layers that it needs, in order of appearance, each once."""
        return tuple(self.positions)

    @property
    def positions(self) -> dict[str, int]:
        """Where each name first stands in the text, in characters from 0."""
        found: dict[str, int] = {}
        for name in _names(self.root):
            found.setdefault(name.name, name.position)
        return found

    def on_date(self, date: str) -> Formula:
        """The same formula over the layers of one date: each name without a date becomes name@date."""
        text = self.text
        for name in sorted(_names(self.root), key=lambda name: name.position, reverse=True):
            if "@" not in name.name:
                end = name.position + len(name.name)
                text = f"{text[:end]}@{date}{text[end:]}"
        return parse_formula(text)

    def evaluate(self, layers: Mapping[str, NDArray[np.float32]]) -> NDArray[np.float32]:
        """The formula's value, float32, of the shape that the `layers` (float32, NaN = invalid) have in common."""
        shape = np.broadcast_shapes(*(layer.shape for layer in layers.values()))
        result: NDArray[np.float32] = np.empty((1, *shape), dtype=np.float32)
        Program.compile({"": self.root}, [""]).run(layers, result)
        return result.reshape(shape)


def parse_formula(text: str) -> Formula:
    """Read a formula. Raises FormulaError that points at the character where it stops making sense."""
    if len(text) > MAX_LENGTH:
        raise FormulaError(text, f"the formula is longer than {MAX_LENGTH} characters; make several features of it", 0)
    return Formula(text, _Parser(text).parse())


def _names(node: Node) -> Iterator[Name]:
    if isinstance(node, Name):
        yield node
    elif isinstance(node, Call):
        for argument in node.arguments:
            yield from _names(argument)


@dataclass(frozen=True, slots=True)
class _Token:
    kind: str  # number, name, sign or end
    text: str
    position: int


def _tokens(text: str) -> Iterator[_Token]:
    position = 0
    while position < len(text):
        match = _TOKEN.match(text, position)
        if match is None:
            hint = _HINTS.get(text[position])
            raise FormulaError(
                text, f"{text[position]!r} has no meaning in a formula{f'; {hint}' if hint else ''}", position
            )  # fmt: skip
        if match.lastgroup == "number" and re.match(r"[A-Za-z0-9_.]", text[match.end() :]):
            raise FormulaError(text, "a number runs into what follows it; write * to multiply", match.end())
        if match.lastgroup != "space":
            yield _Token(match.lastgroup or "", match.group(), position)
        position = match.end()
    yield _Token("end", "", len(text))


@dataclass(slots=True)
class _Parser:
    """Precedence climbing (Pratt 1973, "Top down operator precedence") over the tokens of one formula."""

    text: str
    tokens: list[_Token] = field(init=False)
    next: int = 0
    depth: int = 0

    def parse(self) -> Node:
        self.tokens = list(_tokens(self.text))
        if self._peek().kind == "end":
            self._fail("the formula is empty", self._peek())
        root = self._expression(0)
        token = self._peek()
        if token.kind != "end":
            self._fail(self._why_not_after_a_value(token), token)
        if _depth(root) > MAX_DEPTH:
            raise FormulaError(
                self.text, f"the formula has more than {MAX_DEPTH} steps in a row; make several features", 0
            )
        return root

    def _peek(self) -> _Token:
        return self.tokens[self.next]

    def _take(self) -> _Token:
        token = self.tokens[self.next]
        self.next += 1
        return token

    def _fail(self, reason: str, token: _Token) -> NoReturn:
        raise FormulaError(self.text, reason, token.position)

    def _why_not_after_a_value(self, token: _Token) -> str:
        if token.text == ")":
            return "this bracket was never opened"
        if token.text == ",":
            return "a comma stands only between the values of a function; decimals are written with a point"
        return f"an operation such as + - * / is missing before {token.text!r}"

    def _expression(self, least_power: int) -> Node:
        self.depth += 1
        if self.depth > MAX_DEPTH:
            self._fail(f"the formula is nested more than {MAX_DEPTH} deep; make several features of it", self._peek())
        left = self._operand()
        while (token := self._peek()).text in _BINARY and token.kind != "number":
            left_power, right_power, operation = _BINARY[token.text]
            if left_power < least_power:
                break
            self._take()
            if token.text == "*" and self._peek().text == "*":
                self._fail("write ^ for a power", token)
            left = Call(operation, (left, self._expression(right_power)))
            if left_power == _COMPARISON_POWER and _BINARY.get(self._peek().text, (0,))[0] == _COMPARISON_POWER:
                self._fail("comparisons do not chain; join two of them with 'and'", self._peek())
        self.depth -= 1
        return left

    def _operand(self) -> Node:
        token = self._take()
        if token.kind == "number":
            value = float(token.text)
            if not math.isfinite(np.float32(value) if abs(value) < 3.5e38 else math.inf):
                self._fail("this number is too large for the 32-bit numbers that features are kept in", token)
            return Number(value)
        if token.text == "(":
            inside = self._expression(0)
            self._close(token)
            return inside
        if token.text == "-":
            return Call("negative", (self._expression(_MINUS_POWER),))
        if token.text == "+":
            return self._expression(_MINUS_POWER)
        if token.text == "not":
            return Call("not", (self._expression(_NOT_POWER),))
        if token.kind == "name" and token.text not in _WORDS:
            return self._named(token)
        if token.kind == "end":
            self._fail("the formula ends where a value should stand", token)
        self._fail(f"a value should stand here, not {token.text!r}", token)

    def _named(self, token: _Token) -> Node:
        if self._peek().text == "(":
            return self._function(token)
        if token.text in CONSTANTS:
            return Number(CONSTANTS[token.text])
        return Name(token.text, token.position)

    def _function(self, name: _Token) -> Node:
        if name.text not in FUNCTIONS:
            close = difflib.get_close_matches(name.text.casefold(), FUNCTIONS, n=1, cutoff=0.6)
            hint = f"did you mean {close[0]}?" if close else f"there are {', '.join(FUNCTIONS)}"
            self._fail(f"there is no function {name.text!r}; {hint}", name)
        bracket = self._take()
        arguments: list[Node] = []
        if self._peek().text != ")":
            arguments.append(self._expression(0))
            while self._peek().text == ",":
                self._take()
                arguments.append(self._expression(0))
        self._close(bracket)
        least, most = FUNCTIONS[name.text]
        if len(arguments) < least or (most is not None and len(arguments) > most):
            wanted = f"{least}" if most == least else f"at least {least}"
            self._fail(f"{name.text} takes {wanted} value{'s' if wanted != '1' else ''}, not {len(arguments)}", name)
        return Call(name.text, tuple(arguments))

    def _close(self, opened: _Token) -> None:
        token = self._peek()
        if token.kind == "end":
            self._fail("this bracket is never closed", opened)
        if token.text != ")":
            self._fail(self._why_not_after_a_value(token), token)
        self._take()


def _depth(root: Node) -> int:
    """Levels of a tree, without recursion: a long sum is a deep tree."""
    deepest, stack = 0, [(root, 1)]
    while stack:
        node, level = stack.pop()
        deepest = max(deepest, level)
        if isinstance(node, Call):
            stack.extend((argument, level + 1) for argument in node.arguments)
    return deepest

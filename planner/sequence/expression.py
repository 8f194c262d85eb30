"""Arithmetic in a sequence file: "2*split + 40 us". Parsed by a small grammar of its own, never evaluated as code.

    sum     = product (("+" | "-") product)*
    product = sign (("*" | "/") sign)*
    sign    = ("+" | "-") sign | atom
    atom    = number [unit] | setting | function "(" sum ("," sum)* ")" | "(" sum ")"

A unit stands right after its number; a "/" without spaces belongs to the unit ("2 Er/us"), with spaces it divides.
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from planner.errors import QuantityError
from planner.quantities import PLAIN, Dimension, describe, nearest, unit

if TYPE_CHECKING:
    from planner.arrays import FloatArray

LONGEST = 200  # characters
DEEPEST = 32  # nested brackets and signs
FUNCTIONS = {"min": (1, 16), "max": (1, 16), "abs": (1, 1), "sqrt": (1, 1)}  # fewest and most arguments
TOKEN = re.compile(
    r"\s*(?:(?P<number>(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3}(?![\w.]))?)"
    r"(?:\s*(?P<unit>[A-Za-zµμ%]+(?:\^-?\d)?(?:/[A-Za-zµμ]+(?:\^-?\d)?)*))?"
    r"|(?P<name>[A-Za-z_]\w*)|(?P<sign>[-+*/(),]))"
)
Step = tuple[str, float | str | int]


class ExpressionError(QuantityError):
    """Arithmetic that cannot be read.

    `offset` is the character in the text (from 0) where reading stopped; `name` the setting that is not there, if
    that is what is wrong.
    """

    def __init__(self, message: str, offset: int, name: str = "") -> None:
        super().__init__(message)
        self.offset = offset
        self.name = name


@dataclass(frozen=True)
class Expression:
    """Parsed arithmetic. `names` are the settings it uses; `dimension` that of its value, in SI (angles in rad)."""

    text: str
    names: tuple[str, ...] = ()
    dimension: Dimension = PLAIN
    steps: tuple[Step, ...] = field(default=(), repr=False)  # reverse Polish

    @classmethod
    def constant(cls, value_si: float, dimension: Dimension, text: str = "") -> "Expression":
        """An expression that is one number."""
        return cls(text or f"{value_si:.12g}", (), dimension, (("number", value_si),))

    def evaluate(self, columns: Mapping[str, "FloatArray"]) -> "FloatArray":
        """The value for every row of `columns` (SI, all of one shape): float array of that shape, () without columns.

        A division by zero or a root of a negative number gives inf or nan; the caller refuses what is not finite.
        """
        import numpy as np

        stack: list[FloatArray] = []
        with np.errstate(all="ignore"):
            for kind, what in self.steps:
                if kind == "number":
                    stack.append(np.asarray(what, dtype=np.float64))
                elif kind == "name":
                    stack.append(columns[str(what)])
                else:
                    count = int(what)
                    arguments = stack[-count:]
                    del stack[-count:]
                    stack.append(_apply(kind, arguments))
        shape = next(iter(columns.values())).shape if columns else ()
        return np.broadcast_to(stack[0], shape).astype(np.float64)


def _apply(kind: str, arguments: list["FloatArray"]) -> "FloatArray":
    import numpy as np

    first = arguments[0]
    if kind == "negate":
        return np.negative(first)
    if kind == "abs":
        return np.abs(first)
    if kind == "sqrt":
        return np.sqrt(first)
    operation = {
        "+": np.add,
        "-": np.subtract,
        "*": np.multiply,
        "/": np.divide,
        "min": np.minimum,
        "max": np.maximum,
    }[kind]
    for other in arguments[1:]:
        first = operation(first, other)
    return first


@dataclass(frozen=True)
class _Token:
    kind: str  # "number", "name", or the sign itself; "end"
    value: float
    dimension: Dimension
    text: str
    offset: int


def _tokens(text: str, names: Mapping[str, Dimension]) -> list[_Token]:
    found: list[_Token] = []
    at = 0
    while at < len(text):
        match = TOKEN.match(text, at)
        if match is None:
            if not text[at:].strip():
                break
            start = at + len(text[at:]) - len(text[at:].lstrip())
            raise ExpressionError(
                f'"{text[start]}" has no meaning in arithmetic; use + - * / ( ), numbers with units and setting names',
                start,
            )
        start = match.start() + len(match.group()) - len(match.group().lstrip())
        if match["number"] is not None:
            found.append(_number(match, names, start))
        elif match["name"] is not None:
            found.append(_Token("name", 0.0, PLAIN, match["name"], start))
        else:
            found.append(_Token(match["sign"], 0.0, PLAIN, match["sign"], start))
        at = match.end()
    return [*found, _Token("end", 0.0, PLAIN, "the end", len(text))]


def _number(match: re.Match[str], names: Mapping[str, Dimension], start: int) -> _Token:
    value, unit_text = float(match["number"]), match["unit"] or ""
    if value in (float("inf"), float("-inf")):
        raise ExpressionError(f'"{match["number"]}" is too large for a number', start)
    if unit_text in names:  # a setting is never called like a unit: the reader sees to that
        raise ExpressionError(f'write "{match["number"]}*{unit_text}" to multiply by the setting', match.start("unit"))
    try:
        one = unit(unit_text)
    except QuantityError as wrong:
        more = '; put spaces around "/" to divide by a setting' if "/" in unit_text else ""
        raise ExpressionError(f"{wrong}{more}", match.start("unit")) from None
    return _Token("number", value * one.multiply / one.divide, one.dimension, match.group().strip(), start)


class _Parser:
    def __init__(self, text: str, names: Mapping[str, Dimension]) -> None:
        self.text, self.names = text, names
        self.tokens = _tokens(text, names)
        self.at = 0
        self.used: dict[str, None] = {}
        self.steps: list[Step] = []

    @property
    def next(self) -> _Token:
        return self.tokens[self.at]

    def take(self) -> _Token:
        token = self.tokens[self.at]
        self.at += 1
        return token

    def expect(self, kind: str) -> None:
        if self.next.kind != kind:
            raise ExpressionError(f'expected "{kind}", found {self.next.text}', self.next.offset)
        self.take()

    def sum(self, depth: int) -> Dimension:
        dimension = self.product(depth)
        while self.next.kind in ("+", "-"):
            token = self.take()
            other = self.product(depth)
            self.same(dimension, other, token)
            self.steps.append((token.kind, 2))
        return dimension

    def same(self, one: Dimension, other: Dimension, token: _Token) -> None:
        if one != other:
            raise ExpressionError(
                f'"{token.text}" joins {describe(one)} and {describe(other)}; both sides need the same dimension',
                token.offset,
            )

    def product(self, depth: int) -> Dimension:
        dimension = self.signed(depth)
        while self.next.kind in ("*", "/"):
            token = self.take()
            sign = 1 if token.kind == "*" else -1
            other = self.signed(depth)
            dimension = tuple(a + sign * b for a, b in zip(dimension, other, strict=True))
            self.steps.append((token.kind, 2))
        return dimension

    def signed(self, depth: int) -> Dimension:
        if depth > DEEPEST:
            raise ExpressionError(f"brackets and signs nested more than {DEEPEST} deep", self.next.offset)
        if self.next.kind in ("+", "-"):
            negative = self.take().kind == "-"
            dimension = self.signed(depth + 1)
            if negative:
                self.steps.append(("negate", 1))
            return dimension
        return self.atom(depth)

    def atom(self, depth: int) -> Dimension:
        token = self.take()
        if token.kind == "number":
            self.steps.append(("number", token.value))
            return token.dimension
        if token.kind == "(":
            dimension = self.sum(depth + 1)
            self.expect(")")
            return dimension
        if token.kind == "name":
            return self.call(token, depth) if self.next.kind == "(" else self.name(token)
        self.at -= 1
        raise ExpressionError(f"expected a number or a setting, found {token.text}", token.offset)

    def name(self, token: _Token) -> Dimension:
        if token.text not in self.names:
            close = nearest(token.text, self.names)
            hint = f'; did you mean "{close}"?' if close else ""
            raise ExpressionError(f'there is no setting "{token.text}"{hint}', token.offset, token.text)
        self.used[token.text] = None
        self.steps.append(("name", token.text))
        return self.names[token.text]

    def call(self, token: _Token, depth: int) -> Dimension:
        if token.text not in FUNCTIONS:
            raise ExpressionError(f'there is no function "{token.text}"; use {", ".join(FUNCTIONS)}', token.offset)
        self.expect("(")
        dimension = self.sum(depth + 1)
        count = 1
        while self.next.kind == ",":
            comma = self.take()
            self.same(dimension, self.sum(depth + 1), comma)
            count += 1
        self.expect(")")
        fewest, most = FUNCTIONS[token.text]
        if not fewest <= count <= most:
            raise ExpressionError(f"{token.text}() takes {fewest} to {most} values, found {count}", token.offset)
        if token.text == "sqrt":
            if any(power % 2 for power in dimension):
                raise ExpressionError(f"sqrt of {describe(dimension)} has no unit", token.offset)
            dimension = tuple(power // 2 for power in dimension)
        self.steps.append((token.text, count))
        return dimension


def parse_expression(text: str, names: Mapping[str, Dimension]) -> Expression:
    """Parse arithmetic on settings.

    Args:
        text: what the file says.
        names: the settings that may be used, with their dimensions.

    Raises:
        ExpressionError: anything that cannot be read, with the place in the text.
    """
    if len(text) > LONGEST:
        raise ExpressionError(f"arithmetic has at most {LONGEST} characters; found {len(text)}", 0)
    if re.search(r"\d,\d", text) and "(" not in text:
        raise ExpressionError('write the decimal point as "."', text.index(","))
    parser = _Parser(text, names)
    dimension = parser.sum(0)
    if parser.next.kind != "end":
        raise ExpressionError(
            f"expected + - * / or the end of the arithmetic, found {parser.next.text}", parser.next.offset
        )
    return Expression(text, tuple(parser.used), dimension, tuple(parser.steps))

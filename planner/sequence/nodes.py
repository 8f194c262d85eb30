"""Reading checked values out of a TOML document: each `Node` knows its path, and every mistake becomes a `Problem`.

The methods return None after noting a problem, so that one pass finds every problem of a file.
"""

import re
import tomllib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from math import isfinite
from typing import Any

from planner.errors import Problem, ProblemsFound, QuantityError
from planner.quantities import describe, nearest, parse_quantity, split_quantity, unit
from planner.sequence.keys import Key
from planner.sequence.positions import Path, Positions, scan

LARGEST_FILE = 262_144  # bytes; a person writes a few thousand
LONGEST_TEXT = 4000  # characters of one text value
NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]{0,39}")
# a dotted key of so many parts is no mistake a person makes, and tomllib needs the square of their number
DOTTED = re.compile(r"""(?:(?:[A-Za-z0-9_-]++|"[^"\n]*+"|'[^'\n]*+')[ \t]*+\.[ \t]*+){64}""")
MOST_PROBLEMS = 200
PLACE = re.compile(r" \(at (?:line (\d+), column (\d+)|end of document)\)$")


def where(path: Path) -> str:
    """A path for people: ("stages", 1, "lasts") is "stages[2].lasts", counted from 1."""
    text = ""
    for part in path:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else part
    return text[:200]


def show(value: Any) -> str:
    """A found value in a few words."""
    if isinstance(value, str):
        return f'"{value[:40]}{"..." if len(value) > 40 else ""}"'
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    if isinstance(value, int):
        return str(value) if abs(value) < 10**20 else "a number of more than 20 digits"
    return f"{value:g}" if isinstance(value, float) else str(value)[:40]


@dataclass
class Document:
    """One file being read: its data, the places in it, and the problems found so far."""

    file: str
    text: str
    data: dict[str, Any]
    positions: Positions
    schema: dict[str, dict[str, Key]]
    problems: list[Problem] = field(default_factory=list)
    # settings that are there but could not be read: whatever names them is not a second mistake
    unreadable: set[str] = field(default_factory=set)

    def problem(
        self, path: Path, message: str, hint: str = "", *, key: bool = False, offset: int | None = None
    ) -> None:
        """Note a problem at a value (or at its key); `offset` characters into a quoted value."""
        line, column = self.positions.place(path, key=key)
        start = self.positions.values.get(path)
        if offset is not None and start is not None and not self.text.startswith(('"""', "'''"), start):
            column += offset + 1  # the quotation mark
        self.problems.append(
            Problem(file=self.file, line=line, column=column, where=where(path), message=message, hint=hint)
        )

    def root(self) -> "Node":
        return Node(self, (), self.data)

    def finish(self) -> None:
        """Raise ProblemsFound, in the order of the file, if there is any problem."""
        if self.problems:
            ordered = sorted(dict.fromkeys(self.problems), key=lambda problem: (problem.line, problem.column))
            shown = ordered[:MOST_PROBLEMS]
            if len(ordered) > len(shown):
                rest = f"{len(ordered) - len(shown)} more problems are not listed"
                shown.append(Problem(file=self.file, line=0, column=0, where="", message=rest, hint="mend these first"))
            raise ProblemsFound(shown)


def whole_file_problem(file: str, message: str, hint: str = "", line: int = 0, column: int = 0) -> ProblemsFound:
    """A problem that stops the reading of a file."""
    return ProblemsFound([Problem(file=file, line=line, column=column, where="", message=message, hint=hint)])


def read_text(path: str, what: str) -> str:
    """The text of a file of at most LARGEST_FILE bytes.

    Raises:
        ProblemsFound: not there, not readable, too large, or not UTF-8 (with the line).
    """
    try:
        with open(path, "rb") as handle:
            raw = handle.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise whole_file_problem(path, f"there is no such {what}", "check the name and the folder") from None
    except OSError as wrong:
        raise whole_file_problem(path, f"the {what} cannot be read: {wrong.strerror}") from None
    if len(raw) > LARGEST_FILE:
        raise whole_file_problem(path, f"a {what} has at most {LARGEST_FILE} bytes; this file is larger")
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError as wrong:
        line = raw.count(b"\n", 0, wrong.start) + 1
        column = len(raw[raw.rfind(b"\n", 0, wrong.start) + 1 : wrong.start].decode("utf-8", "replace")) + 1
        message = f"byte 0x{raw[wrong.start]:02x} is not UTF-8 text"
        raise whole_file_problem(path, message, "save the file as UTF-8", line, column) from None


def parse_document(text: str, file: str, schema: dict[str, dict[str, Key]]) -> Document:
    """TOML text with places.

    Raises:
        ProblemsFound: too large, or not TOML, with the place.
    """
    if len(text) > LARGEST_FILE:
        raise whole_file_problem(file, f"a file has at most {LARGEST_FILE} characters; found {len(text)}")
    text = text.replace("\r\n", "\n")
    if text.startswith("\ufeff"):
        raise whole_file_problem(file, "the file starts with a byte order mark", "save it as plain UTF-8", 1, 1)
    dotted = DOTTED.search(text)
    if dotted:
        line, column = Positions(text).line_column(dotted.start())
        raise whole_file_problem(file, "a dotted key of more than 64 parts", "", line, column)
    try:
        data = tomllib.loads(text)
        positions = scan(text)
    except RecursionError:
        raise whole_file_problem(file, "lists or tables nested too deeply") from None
    except ValueError as wrong:  # TOMLDecodeError, and numbers of thousands of digits
        raise _syntax_problem(text, file, str(wrong)) from None
    return Document(file, text, data, positions, schema)


_SYNTAX_HINTS = (
    ("Invalid value", 'text needs quotation marks: "25 s"'),
    ("Expected '='", 'a line is: name = value; text after "#" is a comment'),
    ("Cannot overwrite a value", "the same name stands twice in this table"),
    ("Cannot declare", "this table stands twice"),
    ("Unclosed array", 'the list lacks its "]"'),
    ("Unterminated string", "the text lacks its closing quotation mark"),
    ("Illegal character '\\n'", "the text lacks its closing quotation mark on this line"),
    ("Unescaped", "write a backslash twice, or use single quotation marks"),
    ("Invalid statement", 'a line is: name = value, [table] or [[list of tables]]; text after "#" is a comment'),
    ("Expected newline or end of document", "one value a line; text needs quotation marks"),
    ("Unclosed inline table", 'the table lacks its "}"; items are separated by commas, on one line'),
)


def _syntax_problem(text: str, file: str, said: str) -> ProblemsFound:
    match = PLACE.search(said)
    message = PLACE.sub("", said)
    line, column = 0, 0
    if match and match.group(1):
        line, column = int(match.group(1)), int(match.group(2))
    elif match:
        line, column = Positions(text).line_column(len(text.rstrip()))
    hint = next((hint for start, hint in _SYNTAX_HINTS if message.startswith(start)), "")
    if "digits" in message and not match:
        message = "a whole number of thousands of digits"
    return whole_file_problem(file, f"not TOML: {message[:200]}", hint, line, column)


@dataclass(frozen=True)
class Node:
    """One value of a document and its path."""

    document: Document
    path: Path
    value: Any

    def problem(self, message: str, hint: str = "", *, offset: int | None = None) -> None:
        """Note a problem at this value."""
        self.document.problem(self.path, message, hint, offset=offset)

    def child(self, part: str | int, value: Any) -> "Node":
        return Node(self.document, (*self.path, part), value)

    # tables and lists

    def fields(self, kind: str) -> "Fields":
        """This table, checked against the keys of `kind`; an empty one if it is no table."""
        allowed = self.document.schema[kind]
        if not isinstance(self.value, dict):
            self.problem(f"expected a table with {_listed(allowed)}; found {show(self.value)}")
            return Fields(self, {}, usable=False)
        known: dict[str, Node] = {}
        for name, value in self.value.items():
            if name in allowed:
                known[name] = self.child(name, value)
                continue
            close = nearest(name, allowed)
            hint = f'did you mean "{close}"?' if close else f"allowed here: {_listed(allowed)}"
            self.document.problem((*self.path, name), f'unknown key "{name[:40]}"', hint, key=True)
        if "about" in known:
            known["about"].text()
        for name, key in allowed.items():
            if key.required and name not in known:
                self.document.problem(self.path, f'"{name}" is missing: {key.says}', key=True)
        return Fields(self, known)

    def named(self, what: str) -> dict[str, "Node"]:
        """This table of user-chosen names, each checked."""
        if not isinstance(self.value, dict):
            self.problem(f"expected a table of {what}; found {show(self.value)}")
            return {}
        found = {}
        for name, value in self.value.items():
            if NAME.fullmatch(name):
                found[name] = self.child(name, value)
            else:
                self.document.problem(
                    (*self.path, name),
                    f'"{name[:40]}" cannot be a name',
                    "a name is a letter, then letters, digits or _, at most 40",
                    key=True,
                )
        return found

    def items(self, what: str, most: int) -> list["Node"]:
        """This list, at most `most` long."""
        if not isinstance(self.value, list):
            self.problem(f"expected a list of {what} in [ ]; found {show(self.value)}")
            return []
        if len(self.value) > most:
            self.problem(f"at most {most} {what}; found {len(self.value)}")
            return []
        return [self.child(number, value) for number, value in enumerate(self.value)]

    # single values

    def text(self) -> str | None:
        if not isinstance(self.value, str):
            self.problem(f"expected text in quotation marks; found {show(self.value)}")
            return None
        if len(self.value) > LONGEST_TEXT:
            self.problem(f"at most {LONGEST_TEXT} characters; found {len(self.value)}")
            return None
        return self.value

    def flag(self) -> bool | None:
        if not isinstance(self.value, bool):
            self.problem(f"expected true or false, without quotation marks; found {show(self.value)}")
            return None
        return self.value

    def whole(self, low: int, high: int) -> int | None:
        if isinstance(self.value, bool) or not isinstance(self.value, int):
            self.problem(f"expected a whole number; found {show(self.value)}")
            return None
        if not low <= self.value <= high:
            self.problem(f"expected a whole number from {low} to {high}; found {show(self.value)}")
            return None
        return self.value

    def choice(self, allowed: Sequence[str], what: str) -> str | None:
        value = self.text()
        if value in self.document.unreadable:
            return None
        if value is None or value in allowed:
            return value
        close = nearest(value, allowed)
        hint = f'did you mean "{close}"?' if close else f"expected one of {_listed(allowed)}"
        self.problem(f"there is no {what} {show(value)}", hint)
        return None

    def unknown(self, allowed: Iterable[str], what: str) -> None:
        """Note that this value's own key names nothing that there is."""
        name = str(self.path[-1])
        if name in self.document.unreadable:
            return
        names = list(allowed)
        close = nearest(name, names)
        hint = f'did you mean "{close}"?' if close else f"there is {_listed(names) or 'none'}"
        self.document.problem(self.path, f'there is no {what} "{name[:40]}"', hint, key=True)

    def unit_text(self) -> str | None:
        value = self.text()
        if value is None:
            return None
        try:
            unit(value)
        except QuantityError as wrong:
            self.problem(str(wrong))
            return None
        return value.strip()

    def number(self) -> float | None:
        """A plain finite number."""
        if isinstance(self.value, bool) or not isinstance(self.value, int | float):
            self.problem(f"expected a plain number; found {show(self.value)}")
            return None
        return self._finite(self.value)

    def _finite(self, value: float) -> float | None:
        try:
            number = float(value)
        except OverflowError:
            number = float("inf")
        if not isfinite(number):
            self.problem(f"expected a finite number; found {show(self.value)}")
            return None
        return number

    def quantity(
        self,
        unit_text: str,
        *,
        bare: bool = False,
        low: float = float("-inf"),
        high: float = float("inf"),
        above: float = float("-inf"),
    ) -> float | None:
        """A quantity in SI of the dimension of `unit_text`; `bare` lets a plain number count in that unit.

        It must lie in [low, high] and beyond `above` (SI).
        """
        value: float | None
        if isinstance(self.value, int | float) and not isinstance(self.value, bool):
            value = self._bare(unit_text, bare)
        elif isinstance(self.value, str):
            value = self._quantity(unit_text, bare)
        else:
            self.problem(f"expected {_example(unit_text)}; found {show(self.value)}")
            return None
        if value is None:
            return None
        if value <= above:
            self.problem(f"expected more than {above:g}; found {show(self.value)}")
            return None
        if not low <= value <= high:
            one = unit(unit_text)
            ends = f"{low / one.factor:.6g} to {high / one.factor:.6g} {unit_text}".strip()
            if high == float("inf"):
                ends = f"at least {low / one.factor:.6g} {unit_text}".strip()
            self.problem(f"expected {ends}; found {show(self.value)}")
            return None
        return value

    def _bare(self, unit_text: str, bare: bool) -> float | None:
        number = self._finite(self.value)
        one = unit(unit_text)
        if number is None:
            return None
        if not bare and any(one.dimension):
            self.problem(f"expected {_example(unit_text)}; found {show(self.value)} without a unit")
            return None
        return self._finite(number * one.multiply / one.divide)

    def _quantity(self, unit_text: str, bare: bool) -> float | None:
        try:
            number, found = split_quantity(self.value)
            if bare and not found:
                self.problem(f"expected {_example(unit_text)}; found {show(self.value)} without a unit")
                return None
            return self._finite(parse_quantity(self.value, unit_text)) if isfinite(number) else None
        except QuantityError as wrong:
            self.problem(str(wrong))
            return None

    def pair(self, unit_text: str, *, bare: bool = False) -> tuple[float, float] | None:
        """[low, high] in SI, low below high."""
        if not isinstance(self.value, list) or len(self.value) != 2:
            self.problem(f"expected [lowest, highest]; found {show(self.value)}")
            return None
        low, high = (self.child(i, value).quantity(unit_text, bare=bare) for i, value in enumerate(self.value))
        if low is None or high is None:
            return None
        if low >= high:
            self.problem("expected [lowest, highest], the lower one first")
            return None
        return low, high


@dataclass(frozen=True)
class Fields:
    """The known keys of one table. `usable` is false where a table was expected and something else stands."""

    node: Node
    known: dict[str, Node]
    usable: bool = True

    def get(self, name: str) -> Node | None:
        return self.known.get(name)

    def has(self, name: str) -> bool:
        return name in self.known

    def problem(self, message: str, hint: str = "") -> None:
        """Note a problem of the table as a whole, at its key."""
        self.node.document.problem(self.node.path, message, hint, key=True)


def _listed(names: Sequence[str] | dict[str, Key]) -> str:
    return ", ".join(names)


def _example(unit_text: str) -> str:
    if not any(unit(unit_text).dimension):
        return "a plain number or a percentage"
    if unit(unit_text).dimension == unit("s").dimension:
        return 'a time with a unit, such as "25 s"'
    return f'a quantity such as "5 {unit_text}" ({describe(unit(unit_text).dimension)})'

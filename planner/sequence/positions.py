"""Where each key and value of a TOML document stands. Tokens only: what is valid TOML, tomllib alone decides.

tomllib gives values without places. This scanner walks a document that tomllib has accepted and notes the offset of
every key and value under its path: a tuple of table keys (str) and places in arrays (int, from 0).
"""

import re
from bisect import bisect_right
from dataclasses import dataclass, field

Path = tuple[str | int, ...]

SPACE = re.compile(r"[ \t]*+")
BLANK = re.compile(r"(?:[ \t\r\n]++|#[^\n]*+)*+")  # white space, line ends and comments
BARE_KEY = re.compile(r"[A-Za-z0-9_-]++")
STRING = re.compile(
    r'"""(?:[^\\]|\\[\s\S])*?"{3,5}'
    r"|'''[\s\S]*?'{3,5}"
    r'|"(?:[^"\\\n]|\\.)*+"'
    r"|'[^'\n]*+'"
)
SCALAR = re.compile(r"[^,\]}\n#]++")
ESCAPE = re.compile(r'\\(u[0-9A-Fa-f]{4}|U[0-9A-Fa-f]{8}|["\\bfnrt])')
ESCAPED = {"b": "\b", "f": "\f", "n": "\n", "r": "\r", "t": "\t", '"': '"', "\\": "\\"}


@dataclass
class Positions:
    """Offsets of keys and values by path, and the text's line starts. `line_column` turns an offset into a place."""

    text: str
    values: dict[Path, int] = field(default_factory=dict)
    keys: dict[Path, int] = field(default_factory=dict)
    leaves: set[Path] = field(default_factory=set)  # paths whose value is neither table nor array

    def __post_init__(self) -> None:
        self._starts = [0, *(match.end() for match in re.finditer("\n", self.text))]

    def line_column(self, offset: int) -> tuple[int, int]:
        """Line and column of an offset, both from 1, the column in characters."""
        line = bisect_right(self._starts, offset)
        return line, offset - self._starts[line - 1] + 1

    def place(self, path: Path, *, key: bool = False) -> tuple[int, int]:
        """Line and column of a value (or of its key), or of the nearest table or array around it that has a place."""
        first, second = (self.keys, self.values) if key else (self.values, self.keys)
        while path:
            offset = first.get(path, second.get(path))
            if offset is not None:
                return self.line_column(offset)
            path = path[:-1]
        return (0, 0)


class _Scanner:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.found = Positions(text)
        self.counts: dict[Path, int] = {}  # how many tables each array of tables has so far

    def skip(self, pattern: re.Pattern[str]) -> None:
        match = pattern.match(self.text, self.at)
        if match is not None:
            self.at = match.end()

    def peek(self, text: str) -> bool:
        return self.text.startswith(text, self.at)

    def document(self) -> Positions:
        here: Path = ()
        while True:
            self.skip(BLANK)
            if self.at >= len(self.text):
                return self.found
            if self.peek("["):
                here = self.header()
            else:
                self.pair(here)

    def header(self) -> Path:
        opened, double = self.at, self.peek("[[")
        self.at += 2 if double else 1
        path: Path = ()
        parts = self.key()
        for index, (part, offset) in enumerate(parts):
            path = (*path, part)
            self.found.keys.setdefault(path, offset)
            last = index == len(parts) - 1
            if last and double:
                number = self.counts.get(path, 0)
                self.counts[path] = number + 1
                path = (*path, number)
                self.found.values[path] = opened
            elif path in self.counts:  # a table inside the newest table of an array
                path = (*path, self.counts[path] - 1)
        self.found.keys.setdefault(path, parts[-1][1])
        self.found.values.setdefault(path, opened)
        self.at += 2 if double else 1
        return path

    def pair(self, here: Path) -> None:
        path = here
        for part, offset in self.key():
            path = (*path, part)
            self.found.keys.setdefault(path, offset)
        self.at += 1  # the "="
        self.skip(SPACE)
        self.value(path)

    def key(self) -> list[tuple[str, int]]:
        """Parts of a dotted key with their offsets; ends after white space, before "=" or "]"."""
        parts: list[tuple[str, int]] = []
        while True:
            self.skip(SPACE)
            start = self.at
            match = STRING.match(self.text, self.at) or BARE_KEY.match(self.text, self.at)
            if match is None:  # not a key: step on, so that the scan always ends
                self.at += 1
                return [*parts, ("", start)]
            self.at = match.end()
            parts.append((_key_text(match.group()), start))
            self.skip(SPACE)
            if not self.peek("."):
                return parts
            self.at += 1

    def value(self, path: Path) -> None:
        self.found.values[path] = self.at
        if self.peek("["):
            self.array(path)
        elif self.peek("{"):
            self.inline_table(path)
        else:
            self.found.leaves.add(path)
            self.skip(STRING if self.peek('"') or self.peek("'") else SCALAR)

    def array(self, path: Path) -> None:
        self.at += 1
        number = 0
        while True:
            self.skip(BLANK)
            if self.peek("]") or self.at >= len(self.text):
                self.at += 1
                return
            start = self.at
            self.value((*path, number))
            number += 1
            self.skip(BLANK)
            if self.peek(",") or self.at == start:
                self.at += 1

    def inline_table(self, path: Path) -> None:
        self.at += 1
        while True:
            self.skip(BLANK)
            if self.peek("}") or self.at >= len(self.text):
                self.at += 1
                return
            self.pair(path)
            self.skip(BLANK)
            if self.peek(","):
                self.at += 1


def _key_text(written: str) -> str:
    if written[0] == "'":
        return written[1:-1]
    if written[0] == '"':
        return ESCAPE.sub(_unescape, written[1:-1])
    return written


def _unescape(match: re.Match[str]) -> str:
    code = match.group(1)
    return ESCAPED[code] if code in ESCAPED else chr(int(code[1:], 16))


def scan(text: str) -> Positions:
    """Places of all keys and values of a document that tomllib accepts (line ends already "\\n").

    Raises:
        RecursionError: nested deeper than Python allows; the caller reports it.
    """
    return _Scanner(text).document()

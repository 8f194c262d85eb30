"""Lines of a CSV file with the place of every cell, for problems that point at them (RFC 4180, one line a row)."""

from collections.abc import Iterator


def cells(line: str) -> list[tuple[str, int]]:
    """The cells of one line and the column (from 1) at which each begins.

    A quoted cell ends at its quote; a line break inside quotes is not supported and shows as an open quote.
    """
    found: list[tuple[str, int]] = []
    at = 0
    while True:
        begins = at
        if line[at : at + 1] == '"':
            text, at = _quoted(line, at + 1)
        else:
            end = line.find(",", at)
            end = len(line) if end < 0 else end
            text, at = line[at:end].strip(), end
        found.append((text, begins + 1))
        if at >= len(line):
            return found
        at += 1  # the comma


def _quoted(line: str, at: int) -> tuple[str, int]:
    parts: list[str] = []
    while True:
        end = line.find('"', at)
        if end < 0:
            return "".join([*parts, line[at:]]), len(line)
        parts.append(line[at:end])
        if line[end + 1 : end + 2] != '"':
            comma = line.find(",", end)
            return "".join(parts), len(line) if comma < 0 else comma
        parts.append('"')
        at = end + 2


def rows(text: str) -> Iterator[tuple[int, list[tuple[str, int]]]]:
    """Line number (from 1) and cells of every line that is neither empty nor a remark (`#`)."""
    for number, line in enumerate(text.removeprefix("\ufeff").splitlines(), start=1):
        if line.strip() and not line.lstrip().startswith("#"):
            yield number, cells(line)

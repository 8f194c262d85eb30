"""Showing the problems of a file: place, source line, a caret under the place, what to do."""

from collections.abc import Sequence
from functools import lru_cache
from typing import Any

import click

from planner.errors import Problem

WIDEST = 100  # characters of a source line that are shown
LARGEST = 1_000_000  # bytes of a file that are read again for its lines


def echo_problems(problems: Sequence[Problem]) -> None:
    """Print every problem to stderr, for people."""
    for problem in problems:
        click.echo(_headline(problem), err=True)
        source = _source_line(problem)
        if source is not None:
            number = f"{problem.line:>6} | "
            click.echo(f"{number}{source[0]}", err=True)
            click.echo(f"{' ' * (len(number) - 2)}| {' ' * source[1]}^", err=True)
        if problem.hint:
            click.echo(f"       {problem.hint}", err=True)
    count = len(problems)
    click.echo(f"{count} problem{'s' if count != 1 else ''}", err=True)


def problem_rows(problems: Sequence[Problem]) -> list[dict[str, Any]]:
    """The problems as JSON-able rows."""
    return [
        {
            "file": problem.file,
            "line": problem.line,
            "column": problem.column,
            "where": problem.where,
            "message": problem.message,
            "hint": problem.hint,
        }
        for problem in problems
    ]


def _headline(problem: Problem) -> str:
    place = f"{problem.file}:{problem.line}:{problem.column}" if problem.line else problem.file
    where = f"{problem.where}: " if problem.where else ""
    return _printable(f"{place}: {where}{problem.message}")


def _printable(text: str) -> str:
    """One character for one character; what would move the cursor becomes a space or a question mark."""
    return "".join(letter if letter.isprintable() else " " if letter == "\t" else "?" for letter in text)


@lru_cache(maxsize=4)
def _lines(file: str) -> tuple[str, ...]:
    try:
        with open(file, encoding="utf-8", errors="replace", newline="") as handle:
            return tuple(handle.read(LARGEST).replace("\r\n", "\n").split("\n"))
    except OSError:
        return ()


def _source_line(problem: Problem) -> tuple[str, int] | None:
    """The line (a window of it, if long) and where in it the caret goes."""
    lines = _lines(problem.file)
    if not 1 <= problem.line <= len(lines):
        return None
    line, caret = lines[problem.line - 1], max(problem.column - 1, 0)
    start = max(0, caret - WIDEST // 2) if len(line) > WIDEST else 0
    return _printable(line[start : start + WIDEST]), caret - start

"""`nightfringe init`: the first files."""

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import click

from planner.errors import InputError, ProblemsFound, QuantityError

if TYPE_CHECKING:
    from planner.sequence.starter import Answers


@click.command()
@click.argument("folder", type=click.Path(file_okay=False), default=".")
@click.option("--yes", is_flag=True, help="ask nothing, take the suggestions")
@click.option("--json", "as_json", is_flag=True, help="ask nothing, print one JSON object")
def command(folder: str, yes: bool, as_json: bool) -> None:
    """Write a commented starter sequence and rig file.

    Asks a few questions at a terminal; elsewhere, or with --yes, the suggestions are taken. Writes sequence.toml and
    rig.toml into FOLDER and never overwrites.
    """
    from planner.sequence.starter import Answers, starter_rig, starter_sequence

    targets = [Path(folder) / name for name in ("rig.toml", "sequence.toml")]
    there = [str(path) for path in targets if path.exists()]
    if there:
        raise InputError(f"{' and '.join(there)} exists already, and init never overwrites; name another folder")
    answers = Answers() if yes or as_json or not sys.stdin.isatty() else _ask()
    texts = [starter_rig(answers), starter_sequence(answers, "rig.toml")]
    _prove(*texts)
    try:
        Path(folder).mkdir(parents=True, exist_ok=True)
        for path, text in zip(targets, texts, strict=True):
            with path.open("x", encoding="utf-8", newline="\n") as handle:  # "x": fails if it has come meanwhile
                handle.write(text)
    except OSError as wrong:
        raise InputError(f"cannot write into {folder}: {wrong.strerror}") from wrong
    if as_json:
        click.echo(json.dumps({"written": [str(path) for path in targets]}))
        return
    for path in targets:
        click.echo(f"written: {path}")
    click.echo(f"next: set the limits in {targets[0]}, then  nightfringe check {targets[1]}")


def _prove(rig_text: str, sequence_text: str) -> None:
    """The files must be right before they are written: an answer may make them wrong in a way no question sees."""
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import parse_sequence
    from planner.sequence.rigfile import parse_rig

    try:
        compile_sequence(parse_sequence(sequence_text, "sequence.toml"), parse_rig(rig_text, "rig.toml"))
    except ProblemsFound as found:
        first = found.problems[0]
        raise InputError(f"these answers do not fit together: {first.where}: {first.message}") from found


def _ask() -> "Answers":
    from planner.sequence.atom_names import ATOMS
    from planner.sequence.starter import Answers

    plain = Answers()
    return Answers(
        title=click.prompt("What is measured (one line)", default=plain.title, value_proc=_one_line),
        rig_name=click.prompt("Name of the rig", default=plain.rig_name, value_proc=_one_line),
        atom=click.prompt("Atom", default=plain.atom, type=click.Choice(ATOMS)),
        shortest=click.prompt("Shortest hold", default=plain.shortest, value_proc=_time()),
        longest=click.prompt("Longest hold", default=plain.longest, value_proc=_time()),
        holds=click.prompt("How many hold times", default=plain.holds, type=click.IntRange(2, 100)),
        phases=click.prompt("How many readout phases", default=plain.phases, type=click.IntRange(3, 36)),
        hours=click.prompt("Length of the night", default=plain.hours, value_proc=_time()),
        link=click.prompt("Address of the rig link", default=plain.link, value_proc=_one_line),
    )


def _one_line(text: str) -> str:
    if not text.strip() or not text.isprintable():
        raise click.UsageError("one line of printable text, please")
    return text.strip()


def _time() -> Callable[[str], str]:
    from planner.quantities import parse_quantity

    def check(text: str) -> str:
        try:
            seconds = parse_quantity(text, "s")
        except QuantityError as wrong:
            raise click.UsageError(str(wrong)) from wrong
        if seconds <= 0:
            raise click.UsageError("a time above zero, please")
        return text.strip()

    return check

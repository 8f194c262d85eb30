"""`nightfringe check`: is this file right?"""

import json

import click

from planner.cli.problems import echo_problems, problem_rows
from planner.errors import Problem, ProblemsFound


@click.command()
@click.argument("file", type=click.Path())
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(file: str, as_json: bool) -> int:
    """Find every problem of a sequence or rig file.

    A sequence is checked in itself, against its rig file, and as every single shot of it would be played. Exit code 0
    if all is well, 2 if not.
    """
    problems, said = find_problems(file)
    if as_json:
        click.echo(json.dumps({"ok": not problems, "problems": problem_rows(problems)}))
    elif problems:
        echo_problems(problems)
    else:
        click.echo(f"{file}: no problems")
        for note in said:
            click.echo(f"  {note}")
    return 2 if problems else 0


def find_problems(file: str) -> tuple[list[Problem], tuple[str, ...]]:
    """All problems of a file, and the notes of compiling it where there are none."""
    from planner.sequence.nodes import read_text
    from planner.sequence.reader import parse_sequence
    from planner.sequence.rigfile import is_rig_text, parse_rig, rig_of

    try:
        text = read_text(file, "sequence or rig file")
        if is_rig_text(text):
            parse_rig(text, file)
            return [], ()
        sequence = parse_sequence(text, file)
        rig = rig_of(sequence)
        from planner.sequence.compiler import compile_sequence  # after the cheap checks: it loads numpy

        return [], compile_sequence(sequence, rig).notes
    except ProblemsFound as found:
        return list(found.problems), ()

"""`nightfringe record`: results of a rig with no link."""

import json
import sys

import click

from planner.errors import InputError

ASKED = ("hold_s", "phase_deg", "atoms_a", "atoms_b")


@click.command()
@click.argument("file", type=click.Path(allow_dash=True))
@click.option("--night", help="name of the night; without it, the file's name and the date")
@click.option("--rig", default="by hand", show_default=True, help="name of the rig")
@click.option("--begins", help="when a file with start_s alone began, for example 2026-12-01T20:00:00Z")
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(file: str, night: str | None, rig: str, begins: str | None, logbook: str | None, as_json: bool) -> None:
    """Record results of a rig with no link, from a CSV or typed in.

    FILE has one shot a line under a header: hold_s, phase_deg, atoms_a, atoms_b, start_utc or start_s, and what else
    is known (duration_s, background, saturated, flags, switch_NAME, "setting_NAME [unit]", "reading_NAME [unit]").
    With - for FILE, shots are asked for one by one, or read as CSV from a pipe.
    """
    from datetime import datetime
    from pathlib import Path

    from planner.logbook import default_place, open_logbook
    from planner.night.by_hand import parse_record
    from planner.night.planning import free_name
    from planner.night.running import now_us, owner_name
    from planner.sequence.nodes import read_text

    text = typed() if file == "-" else read_text(file, "file of results")
    begins_us = now_us()
    if begins is not None:
        try:
            begins_us = round(datetime.fromisoformat(begins).astimezone().timestamp() * 1e6)
        except ValueError as error:
            raise InputError(f'--begins expects a time such as 2026-12-01T20:00:00Z; found "{begins}"') from error
    with open_logbook(logbook or default_place(), create=True) as book:
        stem = "typed" if file == "-" else Path(file).stem
        name = night or free_name(book, stem, now_us())
        recorded = parse_record(text, "typed" if file == "-" else file, name=name, rig=rig, begins_us=begins_us)
        row = book.record_night(
            recorded.night, recorded.ends, readings=recorded.readings, now_us=now_us(), who=owner_name()
        )
    if as_json:
        click.echo(json.dumps({"night": row.name, "shots": row.positions}))
    else:
        click.echo(f"recorded {row.positions:,} shots as night {row.name}; see: nightfringe results {row.name}")


def typed() -> str:
    """The CSV of shots typed at a terminal, or what comes through a pipe."""
    from datetime import UTC, datetime

    if not sys.stdin.isatty():
        return sys.stdin.read()
    click.echo(
        "One shot after another; an empty hold ends. The time of each is when its last number was typed.", err=True
    )
    lines = [",".join([*ASKED, "start_utc"])]
    while True:
        hold = click.prompt("hold (s)", default="", show_default=False, err=True)
        if not hold.strip():
            return "\n".join(lines) + "\n"
        values = [hold, *(click.prompt(name, err=True) for name in ("phase (deg)", "atoms a", "atoms b"))]
        lines.append(",".join([*(value.replace(",", ".") for value in values), datetime.now(UTC).isoformat()]))

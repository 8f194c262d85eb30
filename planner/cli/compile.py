"""`nightfringe compile`: the shots of a sequence, as a table."""

import json
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.sequence.compiler import Compiled

WRITERS = (".csv", ".parquet")


@click.command()
@click.argument("file", type=click.Path())
@click.option("--out", type=click.Path(), help="write all shots here: a name that ends in .csv or .parquet")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(file: str, out: str | None, as_json: bool) -> None:
    """Compile a sequence to its shots and timelines.

    The table says what the shots are, not yet in which order. Columns: shot, packet, cell, repeat, timeline, hold_s,
    phase_deg, duration_s, setting_NAME in SI (angles in radians, depth in Er), switch_NAME (+1 for the first state).
    """
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    if out is not None and Path(out).suffix not in WRITERS:
        raise InputError(f'--out ends in .csv or .parquet; found "{out}"')
    sequence = read_sequence(file)
    compiled = compile_sequence(sequence, rig_of(sequence))
    if out is not None:
        write_shots(compiled, out)
    summary = {
        "title": sequence.title,
        "shots": len(compiled.table),
        "hours": float(compiled.table.duration_s.sum()) / 3600.0,
        "packets": int(compiled.table.packet[-1]) + 1,
        "cells": int(compiled.table.cell[-1]) + 1,
        "timelines": len(compiled.timelines),
        "notes": list(compiled.notes),
        "out": out,
    }
    if as_json:
        click.echo(json.dumps(summary))
    else:
        _show(summary)


def _show(summary: dict[str, Any]) -> None:
    from rich.console import Console
    from rich.table import Table

    table = Table(title=summary["title"], show_header=False, title_justify="left")
    for name in ("shots", "hours", "packets", "cells", "timelines"):
        value = summary[name]
        table.add_row(name, f"{value:,.2f}" if name == "hours" else f"{value:,}")
    console = Console(highlight=False)
    console.print(table)
    for note in summary["notes"]:
        console.print(note, markup=False)
    if summary["out"]:
        console.print(f"written: {summary['out']}", markup=False)


def write_shots(compiled: "Compiled", out: str) -> None:
    """Write the shot table; the file appears whole or not at all.

    Raises:
        InputError: the place cannot be written.
    """
    import numpy as np
    import pyarrow as pa
    from pyarrow import csv, parquet

    table = compiled.table
    columns: dict[str, Any] = {"shot": np.arange(len(table))}
    columns |= {name: getattr(table, name) for name in ("packet", "cell", "repeat", "timeline", "hold_s")}
    columns["phase_deg"] = np.rad2deg(table.phase_rad)
    columns["duration_s"] = table.duration_s
    columns |= {f"setting_{name}": column for name, column in table.settings.items()}
    columns |= {f"switch_{name}": column for name, column in table.switches.items()}
    part = f"{out}.part"
    try:
        if out.endswith(".csv"):
            csv.write_csv(pa.table(columns), part)
        else:
            parquet.write_table(pa.table(columns), part)
        os.replace(part, out)
    except OSError as wrong:
        raise InputError(f"cannot write {out}: {wrong.strerror or wrong}") from wrong

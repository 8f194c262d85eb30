"""`nightfringe export`: a night as a table for other programs."""

import json

import click

from planner.errors import InputError


@click.command()
@click.argument("night", required=False)
@click.option("--out", required=True, type=click.Path(), help="where to: a name that ends in .csv or .parquet")
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(night: str | None, out: str, logbook: str | None, as_json: bool) -> None:
    """Write a night as a table for other programs.

    NIGHT is the name or number of a night; without it, the one booked last. One row an attempt that has ended, units
    in the column names, raw counts as the rig gave them. Empty cells were not measured.
    """
    from planner.logbook import default_place, open_logbook
    from planner.night.exporting import export_night, write_csv, write_parquet

    if not out.endswith((".csv", ".parquet")):
        raise InputError(f'--out ends in .csv or .parquet; found "{out}"')
    with open_logbook(logbook or default_place()) as book:
        row = book.night(night)
        export = export_night(book, row)
    (write_csv if out.endswith(".csv") else write_parquet)(export, out)
    rows = len(export.columns["key"])
    if as_json:
        click.echo(json.dumps({"night": row.name, "rows": rows, "columns": list(export.columns), "out": out}))
    else:
        click.echo(f"wrote {rows:,} attempts of night {row.name} to {out}")

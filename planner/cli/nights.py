"""`nightfringe nights`: the nights in the logbook."""

import json
from dataclasses import asdict
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from planner.logbook import NightRow


@click.command()
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(logbook: str | None, as_json: bool) -> None:
    """List the nights in the logbook.

    Times are UTC on the rig's clock. The JSON gives them in microseconds since 1970.
    """
    from planner.logbook import default_place, open_logbook

    with open_logbook(logbook or default_place()) as book:
        found = book.nights()
        counts = {night.id: book.counts(night.id) for night in found}
    if as_json:
        rows = [{**asdict(night), "attempts": counts[night.id]} for night in found]
        click.echo(json.dumps({"nights": rows}))
        return
    show(found, counts)


def show(nights: "list[NightRow]", counts: dict[int, dict[str, int]]) -> None:
    """A table, the latest night last."""
    from datetime import UTC, datetime

    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading, justify in (("night", "left"), ("rig", "left"), ("began (UTC)", "left"), ("shots done", "right")):
        table.add_column(heading, justify="right" if justify == "right" else "left", overflow="fold")
    table.add_column("state", overflow="fold")
    for night in nights:
        began = "-"
        if night.begins_us is not None:
            began = datetime.fromtimestamp(night.begins_us / 1e6, UTC).strftime("%Y-%m-%d %H:%M")
        state = f"{night.state}: {night.why}" if night.why else night.state
        done = f"{counts[night.id].get('done', 0):,} of {night.positions:,}"
        table.add_row(Text(night.name), Text(night.rig), began, done, Text(state))
    Console(highlight=False).print(table if nights else "no night yet; book one with: nightfringe run FILE")

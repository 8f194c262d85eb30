"""`nightfringe rig`: start the stand-in rig, or show what a rig says of itself."""

from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from planner.link.messages import Description, Now


@click.group()
def command() -> None:
    """Start the stand-in rig, or show what a rig says of itself."""


@command.command()
@click.argument("url")
@click.option("--token-file", type=click.Path(path_type=Path), help="file with the bearer token that the rig asks for")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def describe(url: str, token_file: Path | None, as_json: bool) -> None:
    """Show what the rig at URL says of itself, and its time. Starts and changes nothing."""
    from planner.link.client import RigClient
    from planner.link.token import read_token
    from planner.link.wire import dump

    token = None if token_file is None else read_token(token_file)
    with RigClient(url, token) as rig:
        description, now = rig.describe(), rig.now()
    if as_json:
        click.echo(dump({"description": description.document(), "now": now.document()}))
    else:
        _show(description, now)


def _show(description: "Description", now: "Now") -> None:
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False)
    state = "ready" if now.ready else f"not ready: {now.why or 'no reason given'}"
    console.print(f"{description.rig}, {description.clock} clock, {state}", markup=False)
    console.print(f"now {now.now:%Y-%m-%d %H:%M:%S} UTC, {now.uptime_s:,.0f} s since its boot {now.boot}", markup=False)
    console.print(
        f"holds {description.slots} shots at once, keeps results {description.retains_s / 3600:g} h; "
        f"description {description.description}",
        markup=False,
    )
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("setting", "unit", "from", "to"):
        table.add_column(heading, overflow="fold")
    for name, limits in description.settings.items():
        low, high = ("" if limit is None else f"{limit:g}" for limit in (limits.low, limits.high))
        table.add_row(Text(name), Text(limits.unit), low, high)
    console.print(table)
    for name, states in description.switches.items():
        console.print(f"switch {name}: {states[0]} or {states[1]}", markup=False)
    for name, unit in description.readings.items():
        console.print(f"reading {name}" + (f" in {unit}" if unit else ""), markup=False)

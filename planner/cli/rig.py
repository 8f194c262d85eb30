"""`nightfringe rig`: start the stand-in rig, or show what a rig says of itself."""

from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.link.messages import Description, Now

EVENING = datetime(2026, 12, 1, 20, 0, tzinfo=UTC)  # always the same, so that a rehearsal is the same on every day


@click.group()
def command() -> None:
    """Start the stand-in rig, or show what a rig says of itself."""


@command.command("stand-in")
@click.option("--profile", type=click.Path(path_type=Path), required=True, help="what kind of rig to stand in for")
@click.option("--journal", type=click.Path(path_type=Path), required=True, help="file for what truly ran; gone on with")
@click.option("--clock", type=click.Choice(["simulated", "real"]), default="simulated", show_default=True)
@click.option("--start", help="when a simulated clock starts  [default: an evening in December 2026]")
@click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True, help="of all that is drawn")
@click.option("--port", type=click.IntRange(0, 65535), default=0, help="port to listen at; 0 takes a free one")
@click.option("--bind", default="127.0.0.1", show_default=True, help="address; others than loopback need a token")
@click.option("--token-file", type=click.Path(path_type=Path), help="file with the bearer token to ask for")
@click.option("--until-stdin-closes", is_flag=True, help="end with standard input, so with whoever started it")
def stand_in(
    profile: Path,
    journal: Path,
    clock: str,
    start: str | None,
    seed: int,
    port: int,
    bind: str,
    token_file: Path | None,
    until_stdin_closes: bool,
) -> None:
    """Run the stand-in rig until Ctrl-C. It prints its address as one JSON line once it answers.

    Its numbers are invented; it plays nothing and moves nothing.
    """
    from planner.link.clocks import RealClock, SimulatedClock
    from planner.link.host import Host
    from planner.link.journal import Journal
    from planner.link.serve import check_bind, serve
    from planner.link.stand_in.model import StandInModel
    from planner.link.stand_in.profile import read_profile
    from planner.link.stand_in.rig import StandInRig, capabilities_of
    from planner.link.token import read_token
    from planner.link.wire import dump

    token = None if token_file is None else read_token(token_file)
    check_bind(bind, token)
    begin = EVENING if start is None else _time(start)
    read = read_profile(profile)
    kept = Journal(journal)
    latest = kept.recovered.latest
    time = RealClock() if clock == "real" else SimulatedClock(begin if latest is None else max(begin, latest))
    origin = kept.recovered.earliest or time.instant().utc  # drifts go on where they were after a power cut
    rig = StandInRig(StandInModel(read, seed), capabilities_of(read), origin=origin, paced=clock == "real")
    serve(
        Host(rig, time, journal=kept),
        rig,
        announce=lambda address: click.echo(dump({"address": address})),
        bind=bind,
        port=port,
        token=token,
        until_stdin_closes=until_stdin_closes,
    )


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


def _time(text: str) -> datetime:
    from planner.link.messages import parse_time

    try:
        return parse_time(text)
    except ValueError as error:
        raise InputError(f"--start {text}: {error}") from error


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

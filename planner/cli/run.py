"""`nightfringe run`: book a night and run it, or go on with one."""

import json
import signal
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError, LogbookConflict

if TYPE_CHECKING:
    from planner.link.client import RigClient
    from planner.logbook import Logbook, NightRow

INTERRUPTED = 130


class StopRequest:
    """Ctrl-C once: stop after the running shot. Twice: stop at once. The logbook is right in both cases."""

    def __init__(self) -> None:
        self.asked = False

    def __call__(self) -> bool:
        return self.asked

    @contextmanager
    def listening(self) -> Iterator[None]:
        """Within it, SIGINT and SIGTERM are requests."""
        before = {number: signal.signal(number, self._heard) for number in (signal.SIGINT, signal.SIGTERM)}
        try:
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)

    def _heard(self, number: int, frame: object) -> None:
        if self.asked:
            raise KeyboardInterrupt
        self.asked = True
        click.echo("stopping after the running shot (again: at once)", err=True)


@click.command()
@click.argument("files", nargs=-1, type=click.Path())
@click.option("--night", help="name of the night; new: a name to give, known: go on with that one")
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--rig", "link", help="address of the rig link, in place of the rig file's")
@click.option("--token-file", type=click.Path(), help="file with the bearer token that the rig asks for")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="for the random order")
@click.option("--hours", type=click.FloatRange(min=0, min_open=True), help="length of the night's window")
@click.option("--share", "shares", multiple=True, help="of the night for each FILE in turn: 0.6 or 60%; needs --hours")
@click.option("--unattended", is_flag=True, help="nobody stays; needs the approval reference in the rig file")
@click.option("--end", is_flag=True, help="end the night: see the running shot through, take back what waits")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    files: tuple[str, ...],
    night: str | None,
    logbook: str | None,
    link: str | None,
    token_file: str | None,
    seed: int,
    hours: float | None,
    shares: tuple[str, ...],
    unattended: bool,
    end: bool,
    as_json: bool,
) -> int:
    """Book a night and run it, or go on where one stopped.

    FILE is a sequence; several make one night in which they are interleaved, each as often as it says, or, with --share
    and --hours, in its share of the night. Without FILE, the night that is open goes on. Ctrl-C stops after the running
    shot; the same command goes on from there. A crash or a power cut loses nothing that the rig still has, and repeats
    nothing.
    """
    from planner.cli.shares import read_shares
    from planner.logbook import default_place, open_logbook

    with open_logbook(logbook or default_place(), create=bool(files)) as book:
        row = find_night(book, files, night)
        if row is None and files:
            row = book_night(
                book,
                files,
                night=night,
                seed=seed,
                hours=hours,
                shares=read_shares(shares),
                link=link,
                unattended=unattended,
            )
        if row is None:
            raise LogbookConflict("no night is open; book one with: nightfringe run FILE")
        with connect(link or row.link, token_file) as client:
            return drive(book, row, client, end=end, as_json=as_json)


def find_night(book: "Logbook", files: Sequence[str], name: str | None) -> "NightRow | None":
    """The night to go on with: the one named, or the open one; None where FILES ask for a new one.

    Raises:
        LogbookConflict: FILES do not say what that night was booked with, or another night is open.
    """
    known = {row.name: row for row in book.nights()}
    if name is not None and name not in known:
        return None if files else book.night(name)
    row = known[name] if name is not None else book.open_night()
    if row is not None and files:
        check_same(book, row, files, named=name is not None)
    return row


def check_same(book: "Logbook", row: "NightRow", files: Sequence[str], *, named: bool) -> None:
    """A night goes on with the texts that it was booked with, or not at all."""
    from planner.sequence.nodes import read_text
    from planner.sequence.reader import parse_sequence
    from planner.sequence.rigfile import rig_path

    requests = book.requests(row.id)
    texts = [read_text(file, "sequence file") for file in files]
    if texts != [request.sequence_text for request in requests]:
        advice = "give a new name with --night" if named else "run it (nightfringe run) or end it (--end) first"
        raise LogbookConflict(
            f"the night {row.name} is {row.state} with another sequence than {' + '.join(files)}: {advice}"
        )
    rig_file = rig_path(files[0], parse_sequence(texts[0], files[0]).rig)
    if read_text(str(rig_file), "rig file") != requests[0].rig_text:
        raise LogbookConflict(
            f"{rig_file} has changed since the night {row.name} was booked. Its limits hold until it ends: put the old "
            "text back, or end the night (--end) and book a new one"
        )


def book_night(
    book: "Logbook",
    files: Sequence[str],
    *,
    night: str | None,
    seed: int,
    hours: float | None,
    shares: Sequence[float] = (),
    link: str | None,
    unattended: bool,
) -> "NightRow":
    """Book a night and say so, with the cautions."""
    from planner.cli.progress import steps_display
    from planner.night.planning import book_sequence, cautions
    from planner.night.running import now_us, owner_name

    click.echo("putting the shots in order", err=True)
    with steps_display() as progress:
        booked = book_sequence(
            book,
            *files,
            now_us=now_us(),
            who=owner_name(),
            seed=seed,
            shares=shares,
            name=night,
            hours=hours,
            link=link,
            unattended=unattended,
            progress=progress,
        )
    row = booked.night
    click.echo(
        f"booked {row.name}: {row.positions:,} shots, {booked.order_s / 3600:.2f} h, rig {row.rig} at {row.link}",
        err=True,
    )
    for line in (*booked.notes, *cautions(unattended=row.unattended)):
        click.echo(f"- {line}", err=True)
    return row


def connect(link: str, token_file: str | None) -> "RigClient":
    """A client for the rig at `link`."""
    from pathlib import Path

    from planner.link.client import RigClient
    from planner.link.token import read_token

    token = None if token_file is None else read_token(Path(token_file))
    if not link:
        raise InputError("the rig file names no link; give the rig's address with --rig URL")
    return RigClient(link, token)


def drive(
    book: "Logbook", row: "NightRow", client: "RigClient", *, end: bool, as_json: bool, quiet: bool = False
) -> int:
    """Run (or end) the night with a live display; returns the exit code. `quiet` prints nothing to standard output."""
    from planner.cli.progress import night_display
    from planner.night.running import end_night, run_night

    stop = StopRequest()
    with stop.listening(), night_display(row) as display:
        if end:
            end_night(book, row, client, say=display.say)
        else:
            run_night(book, row, client, stopping=stop, say=display.say, progress=display.progress)
    after = book.night(row.id)
    summary: dict[str, Any] = {
        "night": after.name,
        "state": after.state,
        "why": after.why,
        "sent": after.next_position,
        "positions": after.positions,
        "attempts": book.counts(row.id),
    }
    if as_json:
        click.echo(json.dumps(summary))
    elif not quiet:
        ends = ", ".join(f"{count:,} {state}" for state, count in sorted(summary["attempts"].items())) or "none yet"
        click.echo(f"night {after.name} is {after.state}{f' ({after.why})' if after.why else ''}; shots: {ends}")
        if after.state == "stopped":
            click.echo("go on with: nightfringe run")
    return INTERRUPTED if stop.asked else 0

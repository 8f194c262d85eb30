"""`nightfringe rehearse`: a whole night on the stand-in rig, from the sequence file to results and pictures."""

import json
import shutil
from pathlib import Path

import click

from planner.errors import InputError

PROFILE = "gallery-stand-in.toml"
MADE_HERE = ("nightfringe.sqlite", "journal.jsonl")  # what marks a folder as one of ours


@click.command()
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--folder", type=click.Path(path_type=Path), default=Path("rehearsal"), show_default=True)
@click.option("--fresh", is_flag=True, help="begin anew: delete the folder's earlier rehearsal first")
@click.option("--profile", type=click.Path(path_type=Path), help="the stand-in's profile [default: the gallery's]")
@click.option("--share", "shares", multiple=True, help="of the night for each FILE in turn: 0.6 or 60%; needs --hours")
@click.option("--hours", type=click.FloatRange(min=0, min_open=True), help="length of the night's window")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="for the random order")
@click.option("--rig-seed", type=click.IntRange(min=0), default=1, show_default=True, help="for the stand-in's noise")
@click.option("--json", "as_json", is_flag=True, help="print the results as one JSON object")
def command(
    files: tuple[Path, ...],
    folder: Path,
    fresh: bool,
    profile: Path | None,
    shares: tuple[str, ...],
    hours: float | None,
    seed: int,
    rig_seed: int,
    as_json: bool,
) -> int:
    """Rehearse a whole night on the stand-in rig.

    FILE is a sequence file, or the name of one that ships with the program, such as hold-scan; several make one night
    in which they are interleaved. The stand-in rig runs as
    a server of its own on a loopback port, with a simulated clock: a ten-hour night passes in seconds, and everything
    above the rig link behaves as on a real one. Logbook, journal and pictures go to --folder; an interrupted rehearsal
    goes on when called again.
    """
    from rich.console import Console

    from planner.analysis.data import NightData
    from planner.analysis.results import summarise
    from planner.cli import results as results_command
    from planner.cli.run import book_night, connect, drive, find_night
    from planner.cli.shares import read_shares
    from planner.link.stand_in.process import start_stand_in
    from planner.logbook import open_logbook
    from planner.resources import sequences_folder

    sequences = [str(find_sequence(file)) for file in files]
    prepare(folder, fresh=fresh)
    place = str(folder / "nightfringe.sqlite")
    with open_logbook(place, create=True) as book:
        row = find_night(book, sequences, None) if book.nights() else None
        if row is None:
            row = book_night(
                book,
                sequences,
                night=None,
                seed=seed,
                hours=hours,
                shares=read_shares(shares),
                link=None,
                unattended=False,
            )
        click.echo("starting the stand-in rig", err=True)
        chosen = profile or sequences_folder() / PROFILE
        with (
            start_stand_in(chosen, journal=folder / "journal.jsonl", seed=rig_seed) as rig,
            connect(rig.url, None) as client,
        ):
            stopped = drive(book, row, client, end=False, as_json=False, quiet=as_json)
        if stopped:
            return stopped
        data = NightData.from_columns(book.night_columns(row.id))
        titles = [request.title for request in book.requests(row.id)]
    results = summarise(data)
    pictures = results_command.draw(
        results, row.name, str(folder / "contrast-against-hold.png"), str(folder / "fringes.png")
    )
    if as_json:
        click.echo(json.dumps({"night": row.name, **results_command.document(results), "pictures": pictures}))
        return 0
    console = Console(highlight=False)
    results_command.show(results, row.name, console, titles)
    for picture in pictures:
        console.print(f"picture: {picture}", markup=False, soft_wrap=True)
    console.print(f"logbook: {place} (nightfringe results --logbook {place})", markup=False, soft_wrap=True)
    return 0


def find_sequence(file: Path) -> Path:
    """The file itself, or the example of that name that ships with the program.

    Raises:
        InputError: neither is there; the message lists the examples.
    """
    from planner.resources import sequences_folder
    from planner.sequence.rigfile import is_rig_text

    if file.exists():
        return file
    examples = {
        path.stem: path
        for path in sorted(sequences_folder().glob("*.toml"))
        if "stand-in" not in path.stem and not is_rig_text(path.read_text(encoding="utf-8"))
    }
    if str(file) in examples:
        return examples[str(file)]
    raise InputError(f"there is no file {file}, and no example of that name; examples: {', '.join(examples)}")


def prepare(folder: Path, *, fresh: bool) -> None:
    """Make the folder; with `fresh`, delete an earlier rehearsal in it, and nothing that is not one."""
    if fresh and folder.is_dir() and any(folder.iterdir()):
        if not (folder / MADE_HERE[0]).exists():
            raise InputError(f"{folder} holds something else than a rehearsal: give another --folder")
        shutil.rmtree(folder)
    folder.mkdir(parents=True, exist_ok=True)

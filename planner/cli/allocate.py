"""`nightfringe allocate`: what to spend a night on."""

import json
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from planner.design.allocation.result import Allocation
    from planner.sequence.model import Sequence

HOURS = 10.0  # where neither the sequence nor the command says how long the night is


@click.command()
@click.argument("file", type=click.Path())
@click.option("--hours", type=click.FloatRange(min=0, min_open=True), help="rig time [default: the sequence's]")
@click.option(
    "--goal",
    type=click.Choice(["signal", "coherence", "curve", "plateau", "revival", "ladder", "budget"]),
    help="what the night is for [default: the sequence's goal]",
)
@click.option("--best-guess", is_flag=True, help="take what is known of the rig as certain")
@click.option("--write", type=click.Path(), help="write FILE anew to this place with these holds and packets")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    file: str, hours: float | None, goal: str | None, best_guess: bool, write: str | None, as_json: bool
) -> None:
    """Share out rig time for a goal: holds and packets, proved.

    Rig time is the cost: a shot held for a minute costs as much as twenty short ones. What is known of the rig comes
    from [expected] in the sequence file, with its uncertainty.
    """
    from planner.design.allocation.choose import allocate
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    sequence = read_sequence(file)
    rig = rig_of(sequence)
    table = compile_sequence(sequence, rig).table
    dead_s = float((table.duration_s - table.hold_s).mean())
    night = hours if hours is not None else (sequence.goal.hours or HOURS)
    found = allocate(sequence, rig, dead_s, hours=night, goal=goal, robust=not best_guess)
    packets = None if write is None else _write(write, sequence, found, dead_s)
    if as_json:
        click.echo(json.dumps({**document(found), "written": write, "packets_written": packets}))
    else:
        _show(sequence.title, found)
        if packets is not None:
            total = sum(packets.values())
            click.echo(f"written: {write}: {len(packets)} hold(s), {total:,} packets of full fringes in every state")


def _write(place: str, sequence: "Sequence", found: "Allocation", dead_s: float) -> dict[float, int]:
    """Write the sequence with the holds and packets of an allocation; returns them."""
    from pathlib import Path

    from planner.design.allocation.packets import packets_for
    from planner.errors import InputError
    from planner.sequence.rewrite import with_holds

    path = Path(place)
    if path.exists():
        raise InputError(f'"{place}" is there already: give --write another name; nothing was written')
    packets = packets_for(found, sequence, dead_s)
    text = with_holds(sequence, packets, f"allocated for {found.goal}, {found.hours:g} h")
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as wrong:
        raise InputError(f'"{place}" cannot be written: {wrong.strerror}') from wrong
    return packets


def document(found: "Allocation") -> dict[str, Any]:
    """The allocation as one JSON object, in SI."""
    return {
        "goal": found.goal,
        "hours": found.hours,
        "rig_hours": found.rig_s / 3600,
        "shares": [vars(share) for share in found.shares],
        "errors": dict(found.errors),
        "certificate": vars(found.certificate),
        "efficiency_after_rounding": found.rounded,
        "details": dict(found.details),
        "lines": list(found.lines),
    }


def _show(title: str, found: "Allocation") -> None:
    from rich.console import Console
    from rich.table import Table

    console = Console(highlight=False)
    console.print(f"{title}: {found.hours:g} h for the goal {found.goal}", markup=False, style="bold")
    for line in found.lines:
        console.print(line, markup=False)
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("hold (s)", "packets of", "packets", "shots", "rig time (h)", "share"):
        table.add_column(heading, justify="right")
    for share in found.shares:
        table.add_row(
            f"{share.hold_s:.4g}",
            share.kind,
            f"{share.packets:,}",
            f"{share.shots:,}",
            f"{share.rig_s / 3600:.2f}",
            f"{100 * share.wanted_share:.1f} %",
        )
    console.print(table)
    for name, value in found.errors.items():
        console.print(f"expected error of {name}: {value:.3g}", markup=False)
    proof = found.certificate
    console.print(
        f"proof ({proof.criterion}): value {proof.value:.6g}, nothing better than {proof.bound:.6g} for one second of "
        f"rig time: efficiency {100 * proof.efficiency:.2f} % before rounding, "
        f"{100 * found.rounded:.2f} % in whole packets"
        if proof.criterion != "risk"
        else f"proof: the risks of the steps sum to {proof.value:.2g}, {proof.bound:.2g} allowed",
        markup=False,
    )

"""`nightfringe order`: the running order of a sequence, and how well it resists drift."""

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.design.quality import Quality
    from planner.design.running_order import RunningOrder
    from planner.sequence.model import Sequence
    from planner.sequence.table import ShotTable

FIGURES = ("additive_mean", "additive_worst", "coupled_mean", "coupled_worst", "any_period_mean", "any_period_peak")


@click.command()
@click.argument("file", type=click.Path())
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="for every random choice")
@click.option("--out", type=click.Path(), help="write the order here, a CSV with one row a shot")
@click.option("--measured-only", is_flag=True, help="leave warm-up and check shots out of the CSV")
@click.option("--quick", is_flag=True, help="a random spread order only, without letting rhythms cancel")
@click.option("--picture", type=click.Path(), help="draw the order: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    file: str, seed: int, out: str | None, measured_only: bool, quick: bool, picture: str | None, as_json: bool
) -> None:
    """Put the shots of a sequence in a running order.

    The figures are the variance that drift adds to what the night estimates, in units of single-shot noise, beside
    those of the same shots shuffled and swept; 0.04 widens an error bar by 2 percent. The CSV holds start_s (after any
    settle wait), duration_s, hold_s, phase_deg, switch_NAME (+1 for the first state), every setting in its own unit,
    and settle_s (the wait before the shot), kind (0 measured, 1 warm-up, 2 check), packet, cell, repeat, unit (block of
    the last draw).
    """
    from planner.design.compare import parity_figures, shuffled_and_swept
    from planner.design.drift import drifts_of
    from planner.design.ordering import make_order
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.limits import check_order_limits
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    if out is not None and Path(out).suffix.lower() != ".csv":
        raise InputError(f'--out ends in .csv; found "{out}"')
    if picture is not None:
        from planner.plots.style import check_place

        check_place(picture)
    sequence = read_sequence(file)
    rig = rig_of(sequence)
    compiled = compile_sequence(sequence, rig)
    order = make_order(compiled.table, sequence, seed=seed, effort="quick" if quick else "full")
    check_order_limits(compiled, rig, order.start_s, order.shot, settle_s=order.settle_s)
    drifts = drifts_of(sequence, compiled.table)
    others = shuffled_and_swept(compiled.table, sequence, drifts, seed=seed)
    parities = parity_figures(compiled.table, sequence, order)
    if out is not None:
        write_order(order, compiled.table, sequence, out, measured_only=measured_only)
    if picture is not None:
        from planner.plots import running_order, style

        style.save(running_order.figure(order, compiled.table, sequence, sequence.title), picture)
    length = float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])
    summary = {
        "title": sequence.title,
        "seed": seed,
        "shots": len(order),
        "measured": int((order.kind == 0).sum()),
        "hours": length / 3600.0,
        "settling_fraction": float(order.settle_s.sum()) / length,
        "figures": dict(order.figures),
        "parities": parities,
        "shuffled": others["shuffled"].figures(),
        "swept": others["swept"].figures(),
        "dwells": any(switch.slow for switch in sequence.switches.values()),
        "last_draw": dict(order.notes),
        "out": out,
        "picture": picture,
    }
    if as_json:
        click.echo(json.dumps(summary))
    else:
        _show(summary, others)


def _show(summary: dict[str, Any], others: dict[str, "Quality"]) -> None:
    from rich.console import Console
    from rich.table import Table

    from planner.design.quality import wider

    console = Console(highlight=False)
    console.print(
        f"{summary['title']}: {summary['shots']:,} shots, {summary['hours']:.2f} h, seed {summary['seed']}; "
        f"{100 * summary['settling_fraction']:.1f} % of it settling",
        markup=False,
    )
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("variance that drift adds", "this order", "error bar", "shuffled", "swept"):
        table.add_column(heading, justify="left" if heading.startswith("variance") else "right", no_wrap=True)
    columns = [summary["figures"], summary["shuffled"], summary["swept"]]
    for name in FIGURES:
        mine = columns[0][name]
        widened = "" if name.startswith("any") else f"+{100 * wider(mine):.2g} %"
        table.add_row(
            name.replace("_", " "), f"{mine:.3g}", widened, *(f"{column[name]:.3g}" for column in columns[1:])
        )
    for parity, figures in summary["parities"].items():
        for name in ("additive_mean", "coupled_mean"):
            value = figures[name]
            table.add_row(f"{parity}: {name.replace('_', ' ')}", f"{value:.3g}", f"+{100 * wider(value):.2g} %", "", "")
    console.print(table)
    console.print(
        "Units of single-shot variance: 1 doubles the variance of an estimate. coupled: drift of phase and contrast, "
        "at the worst fringe phase. any period: a rhythm of unit size that nobody declared; a shuffle's mean is 1.",
        markup=False,
    )
    if summary["dwells"]:
        console.print(
            "Shuffled and swept as if the slow switch could flip at every shot, without settle times and dwells: no "
            "rig could run them so. What is left of slow drift in the slow switch's own effects is what dwells cost.",
            markup=False,
        )
    draw = summary["last_draw"]
    if draw.get("log2_members") is not None:
        console.print(
            f"The last draw flips {draw['flipped_switch']} in {draw['units']} blocks, one of "
            f"2^{draw['log2_members']:.0f} ways that keep these figures: the group of an exact randomisation test.",
            markup=False,
        )
    else:
        console.print("No parity is wanted, so nothing was flipped at the end.", markup=False)
    for key, words in (("out", "written"), ("picture", "picture")):
        if summary[key]:
            console.print(f"{words}: {summary[key]}", markup=False, soft_wrap=True)


def write_order(
    order: "RunningOrder", table: "ShotTable", sequence: "Sequence", out: str, *, measured_only: bool
) -> None:
    """Write an order as CSV, numbers only, with digits enough that shots never seem to overlap.

    Raises:
        InputError: the place cannot be written.
    """
    import numpy as np

    from planner.quantities import to_unit

    keep = np.flatnonzero(order.kind == 0) if measured_only else np.arange(len(order))
    rows = order.shot[keep]
    columns: dict[str, np.ndarray[Any, Any]] = {
        "start_s": (order.start_s + order.settle_s)[keep],
        "duration_s": order.duration_s[keep],
        "hold_s": table.hold_s[rows],
        "phase_deg": np.rad2deg(table.phase_rad[rows]).round(9),
    }
    columns |= {f"switch_{name}": states[rows] for name, states in table.switches.items()}
    columns |= {
        "settle_s": order.settle_s[keep],
        "kind": order.kind[keep],
        "packet": order.packet[keep],
        "cell": table.cell[rows],
        "repeat": table.repeat[rows],
        "unit": order.unit[keep],
    }
    for name, values in table.settings.items():
        unit = sequence.settings[name].unit
        heading = f"{name}_{unit}".rstrip("_")
        if heading in columns and (name, heading) != (sequence.roles["hold"], "hold_s"):
            heading = f"setting_{heading}"  # a setting called "start" is not the start of a shot
        columns[heading] = np.asarray(to_unit(values[rows], unit))
    rows_out = zip(*(column.tolist() for column in columns.values()), strict=True)
    lines = [",".join(columns), *(",".join(repr(value) for value in row) for row in rows_out)]
    try:
        Path(out).write_text("\n".join(lines) + "\n", encoding="utf-8")
    except OSError as wrong:
        raise InputError(f'the order "{out}" cannot be written: {wrong.strerror}') from wrong

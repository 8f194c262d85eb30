"""`nightfringe order`: the running order of a sequence, and how well it resists drift."""

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

    from planner.design.merging import Part
    from planner.design.running_order import RunningOrder

OF_ONE = ("parities", "shuffled", "swept", "dwells", "last_draw")  # said at the top where a night has one request
FIGURES = ("additive_mean", "additive_worst", "coupled_mean", "coupled_worst", "any_period_mean", "any_period_peak")


@click.command()
@click.argument("files", nargs=-1, required=True, type=click.Path())
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="for every random choice")
@click.option("--share", "shares", multiple=True, help="of the night for each FILE in turn: 0.6 or 60%; needs --hours")
@click.option("--hours", type=click.FloatRange(min=0, min_open=True), help="length of the night that is shared out")
@click.option("--out", type=click.Path(), help="write the order here, a CSV with one row a shot")
@click.option("--measured-only", is_flag=True, help="leave warm-up and check shots out of the CSV")
@click.option("--quick", is_flag=True, help="a random spread order only, without letting rhythms cancel")
@click.option("--picture", type=click.Path(), help="draw the order: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    files: tuple[str, ...],
    seed: int,
    shares: tuple[str, ...],
    hours: float | None,
    out: str | None,
    measured_only: bool,
    quick: bool,
    picture: str | None,
    as_json: bool,
) -> None:
    """Put the shots of a sequence in a running order.

    Several FILES make one night: their packets are interleaved, each request as safe from drift as on its own. They run
    as often as they say, or, with --share and --hours, fill their shares of the night.

    The figures are the variance that drift adds to what the night estimates, in units of single-shot noise, beside
    those of the same shots shuffled and swept; 0.04 widens an error bar by 2 percent. The CSV holds start_s (after any
    settle wait), duration_s, hold_s, phase_deg, switch_NAME (+1 for the first state), every setting in its own unit,
    and settle_s (the wait before the shot), kind (0 measured, 1 warm-up, 2 check), packet, cell, repeat, unit (block of
    the last draw), and request where there are several.
    """
    from planner.cli.order_table import write_order
    from planner.cli.progress import steps_display
    from planner.cli.shares import read_shares
    from planner.night.planning import length_of, plan_night

    if out is not None and Path(out).suffix.lower() != ".csv":
        raise InputError(f'--out ends in .csv; found "{out}"')
    if picture is not None:
        from planner.plots.style import check_place

        check_place(picture)
    with steps_display() as progress:
        planned = plan_night(
            files,
            seed=seed,
            shares=read_shares(shares),
            hours=hours,
            effort="quick" if quick else "full",
            progress=progress,
        )
    order = planned.order
    if out is not None:
        write_order(order, planned.parts, out, measured_only=measured_only)
    if picture is not None:
        from planner.plots import running_order, style

        style.save(running_order.figure(order, planned.parts), picture)
    length = length_of(order)
    several = len(planned.parts) > 1
    requests = [_request(part, order, number, seed, several) for number, part in enumerate(planned.parts)]
    summary: dict[str, Any] = {
        "title": " + ".join(part.sequence.title for part in planned.parts),
        "seed": seed,
        "shots": len(order),
        "measured": int((order.kind == 0).sum()),
        "checks": int((order.kind == 2).sum()),
        "hours": length / 3600.0,
        "settling_fraction": float(order.settle_s.sum()) / length,
        "figures": dict(order.figures),
        **({} if several else {key: requests[0][key] for key in OF_ONE}),
        "requests": requests,
        "out": out,
        "picture": picture,
    }
    if as_json:
        click.echo(json.dumps(summary))
    else:
        _show(summary)


def _request(part: "Part", order: "RunningOrder", number: int, seed: int, several: bool) -> dict[str, Any]:
    """What the order means for one request."""
    from planner.design.compare import parity_figures, shuffled_and_swept
    from planner.design.drift import drifts_of

    others = shuffled_and_swept(part.table, part.sequence, drifts_of(part.sequence, part.table), seed=seed)
    mine = order.request == number
    notes = dict(order.notes["requests"][number]) if several else dict(order.notes)
    rig_s = float((order.settle_s + order.duration_s)[mine].sum())
    return {
        "title": part.sequence.title,
        "measured": int((order.kind[mine] == 0).sum()),
        "rig_hours": rig_s / 3600.0,
        "share": rig_s / float((order.settle_s + order.duration_s).sum()),
        "figures": notes.pop("figures", None) or dict(order.figures),
        "parities": parity_figures(part.table, part.sequence, order, number),
        "shuffled": others["shuffled"].figures(),
        "swept": others["swept"].figures(),
        "dwells": any(switch.slow for switch in part.sequence.switches.values()),
        "last_draw": notes,
    }


def _show(summary: dict[str, Any]) -> None:
    from rich.console import Console

    console = Console(highlight=False)
    checks = f", {summary['checks']} of them check shots" if summary["checks"] else ""
    console.print(
        f"{summary['title']}: {summary['shots']:,} shots{checks}, {summary['hours']:.2f} h, seed {summary['seed']}; "
        f"{100 * summary['settling_fraction']:.1f} % of it settling",
        markup=False,
    )
    several = len(summary["requests"]) > 1
    for request in summary["requests"]:
        if several:
            console.print(
                f"\n{request['title']}: {request['measured']:,} measured shots, {request['rig_hours']:.2f} h, "
                f"{100 * request['share']:.1f} % of the night",
                markup=False,
                style="bold",
            )
        _show_request(request, console, like_alone=several)
    console.print(
        "Units of single-shot variance: 1 doubles the variance of an estimate. coupled: drift of phase and contrast, "
        "at the worst fringe phase. any period: a rhythm of unit size that nobody declared; a shuffle's mean is 1.",
        markup=False,
    )
    if any(request["dwells"] for request in summary["requests"]):
        console.print(
            "Shuffled and swept as if the slow switch could flip at every shot, without settle times and dwells: no "
            "rig could run them so. What is left of slow drift in the slow switch's own effects is what dwells cost.",
            markup=False,
        )
    for key, words in (("out", "written"), ("picture", "picture")):
        if summary[key]:
            console.print(f"{words}: {summary[key]}", markup=False, soft_wrap=True)


def _show_request(request: dict[str, Any], console: "Console", *, like_alone: bool) -> None:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, header_style="bold")
    mine = "this night" if like_alone else "this order"
    for heading in ("variance that drift adds", mine, "error bar", "shuffled", "swept"):
        table.add_column(heading, justify="left" if heading.startswith("variance") else "right", no_wrap=True)
    columns = [request["figures"], request["shuffled"], request["swept"]]
    for name in FIGURES:
        value = columns[0][name]
        widened = "" if name.startswith("any") else _widened(value)
        table.add_row(
            name.replace("_", " "), f"{value:.3g}", widened, *(f"{column[name]:.3g}" for column in columns[1:])
        )
    for parity, figures in request["parities"].items():
        for name in ("additive_mean", "coupled_mean"):
            value = figures[name]
            table.add_row(f"{parity}: {name.replace('_', ' ')}", f"{value:.3g}", _widened(value), "", "")
    console.print(table)
    draw = request["last_draw"]
    if draw.get("log2_members") is not None:
        console.print(
            f"The last draw flips {draw['flipped_switch']} in {draw['units']} blocks, one of "
            f"2^{draw['log2_members']:.0f} ways that keep these figures: the group of an exact randomisation test.",
            markup=False,
        )
    else:
        console.print("No parity is wanted, so nothing was flipped at the end.", markup=False)


def _widened(added: float) -> str:
    from planner.design.quality import wider

    percent = 100 * wider(added)
    return f"+{percent:.0f} %" if percent >= 10 else f"+{percent:.2g} %"

"""`nightfringe stability`: how steady a night was."""

import math
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.console import Console

    from planner.analysis.stability import Curve, NightStability

MOST_ROWS = 12  # correlations on the screen; all are in the JSON


@click.command()
@click.argument("night", required=False)
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option(
    "--of",
    "name",
    default="phase",
    show_default=True,
    metavar="SERIES",
    help="phase, contrast, offset, atoms, noise, or the name of a reading",
)
@click.option("--cut-flag", "cut_flags", multiple=True, help="leave out shots that the rig flagged so; may be repeated")
@click.option("--picture", type=click.Path(), help="draw series, deviations and rhythms: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    night: str | None, logbook: str | None, name: str, cut_flags: tuple[str, ...], picture: str | None, as_json: bool
) -> None:
    """Say how steady a night was: noise against averaging time, rhythms, correlations.

    NIGHT is the name or number of a night; without it, the one booked last. Bands are 95 %.
    """
    import json

    from planner.analysis.data import NightData
    from planner.analysis.stability import stability_of
    from planner.logbook import default_place, open_logbook
    from planner.plots import stability as plot
    from planner.plots import style

    if picture:
        style.check_place(picture)
    with open_logbook(logbook or default_place()) as book:
        row = book.night(night)
        data = NightData.from_columns(book.night_columns(row.id))
    found = stability_of(data, name, cut_flags=cut_flags)
    drawn = []
    if picture:
        title = f"Night {row.name}: {found.series.name}"
        drawn.append(str(style.save(plot.figure(found, title), picture)))
    if as_json:
        click.echo(json.dumps({"night": row.name, "state": row.state, **document(found), "pictures": drawn}))
        return
    from rich.console import Console

    console = Console(highlight=False)
    show(found, row.name, console)
    for place in drawn:
        console.print(f"picture: {place}", markup=False, soft_wrap=True)


def show(found: "NightStability", name: str, console: "Console") -> None:
    """Print deviations, the strongest rhythm, correlations, and what they mean. Fits 80 columns."""
    import numpy as np
    from rich.text import Text

    unit = f" in {found.series.unit}" if found.series.unit else ""
    packets = int(np.isfinite(found.series.values).sum())
    every = _seconds(found.clock.step_s)
    head = f"Night {name}: {found.series.name}{unit}, {packets:,} packets, one every {every} s"
    console.print(Text(head), style="bold")
    console.print(_deviation_table(found))
    console.print()
    for line in rhythm_lines(found):
        console.print(Text(line))
    console.print()
    if found.correlations is None:
        console.print(Text(f"No correlations: {found.why_no_correlations}."))
    else:
        console.print(_correlation_table(found))
        hidden = len(found.correlations.rows) - MOST_ROWS
        if hidden > 0:
            console.print(Text(f"and {hidden} with a larger q: --json lists all"))
        for missing, reason in found.correlations.missing.items():
            console.print(Text(f"not correlated: {missing}: {reason}"))
    console.print()
    for note in found.notes:
        console.print(Text(f"- {note}"))


def rhythm_lines(found: "NightStability") -> list[str]:
    """The strongest sinusoids, a line each."""
    lines: list[str] = []
    for own in found.rhythms:
        amplitude = f"{own.amplitude:.3g} {found.series.unit}".strip()
        chance = "below 1e-6" if own.chance < 1e-6 else f"{own.chance:.2g}"
        share = f"{100 * own.share:.0f} % of the scatter, by chance {chance}"
        lines.append(f"rhythm {_seconds(own.period_s):>7} s, {amplitude}, {share}")
    return lines


def _seconds(value: float) -> str:
    return f"{value:,.0f}" if value >= 100 else f"{value:.3g}"


def _deviation_table(found: "NightStability") -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("time (s)", "packets", "Allan", "95 %", "Hadamard", "noise is", "x shot"):
        table.add_column(heading, justify="right", no_wrap=True)
    own = found.stability
    for at in range(len(own)):
        multiple = own.multiple[at]
        table.add_row(
            _seconds(own.tau_s[at]),
            f"{own.factor[at]:,}",
            f"{own.allan.value[at]:.3g}",
            f"{own.allan.low[at]:.3g} to {own.allan.high[at]:.3g}",
            f"{own.hadamard.value[at]:.3g}" if math.isfinite(own.hadamard.value[at]) else "",
            own.kind_name(at),
            f"{multiple:.3g}" if math.isfinite(multiple) else "",
        )
    return table


def _correlation_table(found: "NightStability") -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("series", no_wrap=True)
    table.add_column("reading", no_wrap=True, max_width=24)
    for heading in ("Pearson", "Spearman", "p", "q", "packets"):
        table.add_column(heading, justify="right", no_wrap=True)
    for row in found.correlations.rows[:MOST_ROWS] if found.correlations else ():
        table.add_row(
            row.series,
            row.reading,
            f"{row.pearson:+.2f}",
            f"{row.spearman:+.2f}",
            f"{row.p:.2g}",
            f"{row.q:.2g}",
            f"{row.packets:,}",
            style="bold" if row.q <= 0.05 else None,
        )
    return table


def document(found: "NightStability") -> dict[str, Any]:
    """The figures as one JSON object: seconds and the series' own unit, null where there is no number."""
    import numpy as np

    own, table = found.stability, found.correlations
    return {
        "attempts": found.attempts,
        "used": found.used,
        "series": found.series.name,
        "unit": found.series.unit,
        "packets": len(found.clock.time_s),
        "packets_without_value": int(np.isnan(found.series.values).sum()),
        "step_s": found.clock.step_s,
        "slots": own.slots,
        "empty_slots": own.empty,
        "pauses": found.clock.pauses,
        "level": own.level,
        "deviations": [
            {
                "tau_s": float(own.tau_s[index]),
                "packets": int(own.factor[index]),
                "noise": own.kind_name(index),
                "alpha": own.kind[index],
                "allan": _point(own.allan, index),
                "hadamard": _point(own.hadamard, index),
                "modified_allan": _point(own.modified, index),
                "total": _point(own.total, index),
                "shot_noise_limit": _number(own.limit[index]),
                "multiple_of_shot_noise": _number(own.multiple[index]),
                "multiple_low": _number(own.allan.low[index] / own.limit[index]),
                "multiple_high": _number(own.allan.high[index] / own.limit[index]),
            }
            for index in range(len(own))
        ],
        "rhythms": [
            {"period_s": own.period_s, "amplitude": own.amplitude, "share": own.share, "false_alarm": own.chance}
            for own in found.rhythms
        ],
        "share_at_false_alarm_0.01": _number(found.alarm),
        "correlations": []
        if table is None
        else [
            {
                "series": row.series,
                "reading": row.reading,
                "packets": row.packets,
                "pearson": row.pearson,
                "spearman": row.spearman,
                "independent_values": _number(row.independent),
                "p": row.p,
                "p_spearman": row.p_spearman,
                "q": row.q,
            }
            for row in table.rows
        ],
        "not_correlated": {} if table is None else dict(table.missing),
        "why_no_correlations": found.why_no_correlations or None,
        "notes": list(found.notes),
    }


def _point(curve: "Curve", index: int) -> dict[str, Any] | None:
    if not math.isfinite(curve.value[index]):
        return None
    return {
        "value": _number(curve.value[index]),
        "low": _number(curve.low[index]),
        "high": _number(curve.high[index]),
        "degrees_of_freedom": _number(curve.freedom[index]),
        "terms": int(curve.terms[index]),
    }


def _number(value: Any) -> float | None:
    number = float(value)
    return number if math.isfinite(number) else None

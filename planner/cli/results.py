"""`nightfringe results`: what a night says."""

import math
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from collections.abc import Sequence

    from rich.console import Console

    from planner.analysis.decay import Decay
    from planner.analysis.results import CurveResults, NightResults


@click.command()
@click.argument("night", required=False)
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--cut-flag", "cut_flags", multiple=True, help="leave out shots that the rig flagged so; may be repeated")
@click.option(
    "--shape",
    type=click.Choice(["best", "exponential", "levels-off", "power-law", "two-classes"]),
    default="best",
    show_default=True,
    help="how contrast falls with hold; best: the shape with the best Akaike score",
)
@click.option("--picture", type=click.Path(), help="draw contrast and atoms against hold: .png, .pdf or .svg")
@click.option("--fringe-picture", type=click.Path(), help="draw the fringes of every hold: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    night: str | None,
    logbook: str | None,
    cut_flags: tuple[str, ...],
    shape: str,
    picture: str | None,
    fringe_picture: str | None,
    as_json: bool,
) -> None:
    """Say what a night measured: contrast, coherence time, lifetime.

    NIGHT is the name or number of a night; without it, the one booked last. Errors are 95 % intervals.
    """
    import json

    from planner.analysis.data import NightData
    from planner.analysis.results import summarise
    from planner.analysis.shapes import SHAPES
    from planner.logbook import default_place, open_logbook
    from planner.plots import style

    for place in filter(None, (picture, fringe_picture)):
        style.check_place(place)
    with open_logbook(logbook or default_place()) as book:
        row = book.night(night)
        data = NightData.from_columns(book.night_columns(row.id))
        titles = [request.title for request in book.requests(row.id)]
    results = summarise(data, cut_flags=cut_flags, shape=SHAPES.get(shape))
    drawn = draw(results, row.name, picture, fringe_picture)
    if as_json:
        click.echo(json.dumps({"night": row.name, "state": row.state, **document(results), "pictures": drawn}))
        return
    from rich.console import Console

    console = Console(highlight=False)
    show(results, row.name, console, titles)
    for place in drawn:
        console.print(f"picture: {place}", markup=False, soft_wrap=True)


def draw(results: "NightResults", name: str, picture: str | None, fringe_picture: str | None) -> list[str]:
    """Write the pictures asked for; returns their paths. A second curve's fringes get a number in the name."""
    from pathlib import Path

    from planner.plots import decay, fringes, style

    drawn = []
    if picture:
        drawn.append(str(style.save(decay.figure(results, f"Night {name}"), picture)))
    for number, curve in enumerate(results.curves if fringe_picture else ()):
        if not len(curve.fringe_shots.hold_s) or fringe_picture is None:
            continue
        path = Path(fringe_picture)
        place = path if number == 0 else path.with_stem(f"{path.stem}-{number + 1}")
        title = ": ".join(filter(None, [f"Night {name}", decay.label(curve, len(results.curves) > 1)]))
        drawn.append(str(style.save(fringes.figure(curve, title), str(place))))
    return drawn


def show(results: "NightResults", name: str, console: "Console", titles: "Sequence[str]" = ()) -> None:
    """Print the results: numbers first, then a small picture, then what they mean. Fits 80 columns.

    titles: of the night's requests.
    """
    from rich.text import Text

    from planner.plots.decay import label
    from planner.plots.terminal import contrast_lines

    console.print(Text(f"Night {name}: {results.used:,} of {results.attempts:,} attempts count", style="bold"))
    for reason, count in results.left_out.items():
        console.print(Text(f"  left out: {count:,} {reason}"))
    for curve in results.curves:
        head = label(curve, len(results.curves) > 1)
        if len(titles) > 1:
            head = ": ".join(filter(None, [titles[curve.request], "" if head.startswith("request ") else head]))
        console.print(Text(f"\n{head}" if head else ""), style="bold")
        for line in headline(curve):
            console.print(Text(line))
        console.print(_table(curve))
        for line in contrast_lines(curve):
            console.print(Text(line), no_wrap=True)
    console.print()
    for note in dict.fromkeys(results.notes):
        console.print(Text(f"- {note}"))


def headline(curve: "CurveResults") -> list[str]:
    """The time scales and the noise, a line each."""
    lines = [
        _scale("coherence time", curve.coherence, "contrast"),
        _scale("population lifetime", curve.lifetime, "atoms"),
    ]
    if curve.noise is not None:
        noise = curve.noise
        lines.append(f"noise                {noise.multiple:.2f} x shot noise ({noise.low:.2f} to {noise.high:.2f})")
    return lines


def _scale(name: str, decay: "Decay | None", what: str) -> str:
    if decay is None:
        return f"{name:20} not measured (see below)"
    start = f"{decay.start:.3f}" if what == "contrast" else f"{decay.start:,.0f}"
    if math.isinf(decay.time_s):
        return f"{name:20} above {decay.low_s:.3g} s; no loss seen; short-hold {what} {start}"
    high = f"to {decay.high_s:.4g} s" if math.isfinite(decay.high_s) else "s and up"
    return f"{name:20} {decay.time_s:.4g} s ({decay.low_s:.4g} {high}); short-hold {what} {start}"


def _table(curve: "CurveResults") -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("hold (s)", "shots", "fringes", "contrast", "95 %", "p(none)", "x shot", "atoms"):
        table.add_column(heading, justify="right", no_wrap=True)
    contrast, atoms = curve.contrast, curve.atoms
    for hold, shots in zip(curve.hold_s, curve.hold_shots, strict=True):
        cells = [f"{hold:.4g}", f"{shots:,}"]
        at = None if contrast is None else _index(contrast.hold_s, hold)
        if contrast is None or at is None:
            cells += ["0", "", "no fringe", "", ""]
        else:
            cells += [
                f"{contrast.fringes[at]}",
                f"{contrast.value[at]:.4f}",
                f"{contrast.low[at]:.4f}-{contrast.high[at]:.4f}",
                "<1e-6" if contrast.p_zero[at] < 1e-6 else f"{contrast.p_zero[at]:.2g}",
                f"{math.sqrt(contrast.noise[at]):.2f}",
            ]
        at = None if atoms is None else _index(atoms.hold_s, hold)
        cells.append("" if atoms is None or at is None else f"{atoms.atoms[at]:,.0f}")
        table.add_row(*cells)
    return table


def _index(holds: Any, hold: float) -> int | None:
    for number, value in enumerate(holds):
        if value == hold:
            return number
    return None


def document(results: "NightResults") -> dict[str, Any]:
    """The results as one JSON object: SI units, null where there is no number (an open end of an interval too)."""
    return {
        "attempts": results.attempts,
        "used": results.used,
        "left_out": dict(results.left_out),
        "level": results.level,
        "curves": [_curve_document(curve) for curve in results.curves],
        "notes": list(results.notes),
    }


def _curve_document(curve: "CurveResults") -> dict[str, Any]:
    holds = []
    for number, hold in enumerate(curve.hold_s):
        entry: dict[str, Any] = {"hold_s": float(hold), "shots": int(curve.hold_shots[number])}
        at = None if curve.contrast is None else _index(curve.contrast.hold_s, hold)
        if curve.contrast is not None and at is not None:
            for name in (
                "fringes",
                "held_back",
                "unchecked",
                "value",
                "low",
                "high",
                "plain",
                "squared",
                "p_zero",
                "noise",
            ):
                key = {"value": "contrast", "low": "contrast_low", "high": "contrast_high", "plain": "contrast_plain"}
                key |= {"squared": "contrast_squared", "noise": "noise_variance_ratio"}
                entry[key.get(name, name)] = json_number(getattr(curve.contrast, name)[at])
            entry["contrast_pooled"] = json_number(curve.pooled_contrast[number])
        at = None if curve.atoms is None else _index(curve.atoms.hold_s, hold)
        if curve.atoms is not None and at is not None:
            entry |= {
                "atoms": json_number(curve.atoms.atoms[at]),
                "atoms_low": json_number(curve.atoms.low[at]),
                "atoms_high": json_number(curve.atoms.high[at]),
            }
        holds.append(entry)
    noise = curve.noise
    return {
        "request": curve.request,
        "settings": dict(curve.settings),
        "shots": curve.shots,
        "packets": curve.packets,
        "packets_without_fringe": curve.unsolved,
        "holds": holds,
        "coherence": decay_document(curve.coherence),
        "why_no_coherence": curve.why_no_coherence or None,
        "shapes": [
            {
                "shape": entry.shape.name,
                "parameters": entry.parameters,
                "log_likelihood": json_number(entry.log_likelihood),
                "score": json_number(entry.score),
                "predictive": json_number(entry.predictive),
            }
            for entry in curve.shapes
        ],
        "lifetime": decay_document(curve.lifetime),
        "why_no_lifetime": curve.why_no_lifetime or None,
        "noise": None
        if noise is None
        else {name: json_number(getattr(noise, name)) for name in ("multiple", "low", "high", "typical", "dof")},
    }


def decay_document(decay: "Decay | None") -> dict[str, Any] | None:
    """A fall as one JSON object, times in s."""
    if decay is None:
        return None
    names = ("time_s", "low_s", "high_s", "start", "start_low", "start_high", "goodness", "goodness_dof", "goodness_p")
    numbers = {name: json_number(getattr(decay, name)) for name in names}
    return {"shape": decay.shape.name, **numbers, "parameters": [json_number(value) for value in decay.parameters]}


def json_number(value: Any) -> float | int | None:
    """A number as JSON has it: null where it is not finite."""
    number = value.item() if hasattr(value, "item") else value
    if isinstance(number, int):
        return number
    return float(number) if math.isfinite(number) else None

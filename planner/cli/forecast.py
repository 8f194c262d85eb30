"""`nightfringe forecast`: what a night will give, before it is run."""

import json
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from planner.design.allocation.knowledge import Knowledge
    from planner.design.forecast.curve import Forecast, Progress

TIMES_SHOWN = 6


@click.command()
@click.argument("file", type=click.Path())
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="of the order and of rehearsals")
@click.option("--trials", type=click.IntRange(0, 1_000_000), default=0, help="also rehearse so many whole nights")
@click.option("--picture", type=click.Path(), help="draw error against time: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(file: str, seed: int, trials: int, picture: str | None, as_json: bool) -> None:
    """Forecast the errors of a night against time, with a band.

    The night's own order says which packets are complete when. The band (90 percent) is what the uncertainty of
    [expected] makes of it. Rehearsals draw every shot of every night and analyse it, as a check of the formulas.
    """
    from planner.design.allocation.choose import scale_of
    from planner.design.allocation.knowledge import knowledge_of
    from planner.design.allocation.signal import Scale
    from planner.design.forecast.curve import alternatives, forecasts, phase_information, progress_of
    from planner.design.ordering import make_order, quality_of
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    if picture is not None:
        from planner.plots.style import check_place

        check_place(picture)
    sequence = read_sequence(file)
    rig = rig_of(sequence)
    table = compile_sequence(sequence, rig).table
    order = make_order(table, sequence, seed=seed)
    known = knowledge_of(sequence, rig, float((table.duration_s - table.hold_s).mean()))
    progress = progress_of(order, table)
    scale: Scale | None = None
    widen = {"decay": order.figures["additive_mean"]}
    if sequence.goal.wanted and "separation" in sequence.roles:
        scale = scale_of(sequence, rig)
        figures = quality_of(order, table, sequence).of_parity(sequence.goal.wanted)
        widen["signal"] = figures["additive_mean"] + figures["coupled_mean"]
    information = phase_information(table.phase_rad)
    found = forecasts(known, progress, scale=scale, information=information, widen=widen, seed=seed)
    others = [] if scale is None or len(progress.hold_s) > 1 else alternatives(known, scale, float(progress.hold_s[0]))
    rehearsed = _rehearse(known, progress, trials, seed) if trials and len(progress.hold_s) > 1 else None
    target = sequence.goal.target if sequence.goal.kind in ("signal", "coherence", "budget") else None
    reached = _reached(found, sequence.goal.kind, target, sequence.goal.target_unit, known)
    if picture is not None:
        from planner.plots.forecast import figure
        from planner.plots.style import save

        save(figure(found, f"Forecast: {sequence.title}"), picture)
    summary = {
        "title": sequence.title,
        "hours": float(progress.time_s[-1]) / 3600,
        "quantities": [_document(one) for one in found],
        "target": reached,
        "alternatives": [{"hold_s": hold, "hours_ratio": ratio} for hold, ratio in others],
        "widened_by_drift": widen,
        "rehearsals": rehearsed,
        "picture": picture,
    }
    if as_json:
        click.echo(json.dumps(summary))
    else:
        _show(summary, found)


def _document(one: "Forecast") -> dict[str, Any]:
    def finite(values: Any) -> list[float | None]:
        return [float(value) if value < float("inf") else None for value in values]

    return {
        "name": one.name,
        "unit": one.unit,
        "time_s": one.time_s.tolist(),
        "error": finite(one.error),
        "low": finite(one.low),
        "high": finite(one.high),
    }


def _reached(
    found: "list[Forecast]", goal: str, target: float | None, unit: str, known: "Knowledge"
) -> dict[str, Any] | None:
    """When the goal's target is met; a target in percent counts against the expected value."""
    if target is None:
        return None
    name = "coherence time" if goal == "coherence" else "signal"
    mine = next((one for one in found if one.name == name), None)
    if mine is None:
        return None
    absolute = target * known.coherence_s if goal == "coherence" and unit in ("", "%") else target
    at = mine.reached_s(absolute)
    last = float(mine.error[-1])
    return {
        "quantity": name,
        "target": absolute,
        "unit": mine.unit,
        "reached_h": None if at is None else at / 3600,
        "nights_needed": (last / absolute) ** 2 if last < float("inf") else None,
    }


def _rehearse(known: "Knowledge", progress: "Progress", trials: int, seed: int) -> dict[str, Any]:
    """Whole nights drawn and analysed: how far the coherence times found stray from the truth, against the forecast."""
    import time

    import numpy as np

    from planner.design.forecast.curve import decay_errors
    from planner.design.forecast.rehearsal import Night, rehearse_coherence

    night = Night(hold_s=progress.hold_s, packets=progress.counts[-1], phases=int(progress.shots[0]))
    began = time.perf_counter()
    times = rehearse_coherence(known, night, trials, seed)
    seconds = time.perf_counter() - began
    error = float(decay_errors(known, progress)["coherence time"][-1])
    shots = trials * int((progress.counts[-1] * progress.shots).sum())
    return {
        "trials": trials,
        "coherence_time_s": float(np.mean(times)),
        "rms_error_s": float(np.sqrt(np.mean((times - known.coherence_s) ** 2))),
        "forecast_error_s": error,
        "shots_per_s": shots / seconds,
    }


def _show(summary: dict[str, Any], found: "list[Forecast]") -> None:
    import numpy as np
    from rich.console import Console
    from rich.table import Table

    console = Console(highlight=False)
    console.print(f"{summary['title']}: {summary['hours']:.2f} h", markup=False, style="bold")
    for one in found:
        table = Table(box=None, pad_edge=False, header_style="bold")
        for heading in ("after (h)", f"error of {one.name} ({one.unit})", "90 % band"):
            table.add_column(heading, justify="right", no_wrap=True)
        for i in np.linspace(len(one.time_s) / TIMES_SHOWN - 1, len(one.time_s) - 1, TIMES_SHOWN).astype(int):
            known = bool(np.isfinite(one.error[i]))
            band = f"{one.low[i]:.3g} to {one.high[i]:.3g}" if np.isfinite(one.high[i]) else ""
            table.add_row(f"{one.time_s[i] / 3600:.2f}", f"{one.error[i]:.3g}" if known else "not yet", band)
        console.print(table)
    target = summary["target"]
    if target is not None:
        when = (
            f"reached after {target['reached_h']:.2f} h"
            if target["reached_h"] is not None
            else f"not reached; about {target['nights_needed']:.2g} such nights would"
            if target["nights_needed"] is not None
            else "not reached"
        )
        console.print(f"target: {target['quantity']} to {target['target']:.3g} {target['unit']}: {when}", markup=False)
    for other in summary["alternatives"][:3]:
        change = 100 * (other["hours_ratio"] - 1)
        words = f"{-change:.0f} % fewer" if change < 0 else f"{change:.0f} % more"
        console.print(f"hold {other['hold_s']:.3g} s instead: {words} hours for the same error", markup=False)
    rehearsed = summary["rehearsals"]
    if rehearsed:
        console.print(
            f"{rehearsed['trials']:,} rehearsed nights stray {rehearsed['rms_error_s']:.3g} s from the true "
            f"coherence time; forecast {rehearsed['forecast_error_s']:.3g} s "
            f"({rehearsed['shots_per_s'] / 1e6:.0f} million shots a second)",
            markup=False,
        )
    if summary["picture"]:
        console.print(f"picture: {summary['picture']}", markup=False, soft_wrap=True)

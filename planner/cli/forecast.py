"""`nightfringe forecast`: what a night will give, before it is run."""

import json
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import click

from planner.cli.spreading import spread_over

if TYPE_CHECKING:
    from planner.arrays import FloatArray
    from planner.design.allocation.knowledge import Knowledge
    from planner.design.allocation.signal import Scale
    from planner.design.forecast.curve import Forecast, Progress
    from planner.design.forecast.whole_nights import Played

TIMES_SHOWN = 6


@click.command()
@click.argument("file", type=click.Path())
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="of the order and of rehearsals")
@click.option("--trials", type=click.IntRange(0, 1_000_000), default=0, help="also rehearse so many whole nights")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="cores that rehearse")
@click.option("--cluster", help="rehearse on the Dask cluster at this address; trusted networks only")
@click.option("--picture", type=click.Path(), help="draw error against time: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    file: str, seed: int, trials: int, jobs: int, cluster: str | None, picture: str | None, as_json: bool
) -> None:
    """Forecast the errors of a night against time, with a band.

    The night's own order says which packets are complete when. The band (90 percent) is what the uncertainty of
    [expected] makes of it. Rehearsals draw every shot of every night, drift with them, and analyse it: a check of the
    formulas. They give the same numbers on any number of cores. A cluster runs whatever it is sent: use one on a
    network that you trust.
    """
    from planner.design.allocation.choose import scale_of
    from planner.design.allocation.knowledge import knowledge_of
    from planner.design.allocation.signal import Scale
    from planner.design.forecast.curve import alternatives, forecasts, phase_information, progress_of
    from planner.design.forecast.whole_nights import Played, played, signal_widening
    from planner.design.ordering import make_order
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
    night: Played | None = None
    widen = {"decay": order.figures["additive_mean"]}
    if sequence.goal.wanted and "separation" in sequence.roles:
        scale = scale_of(sequence, rig)
        night = played(order, table, sequence)
        widen["signal"] = signal_widening(known, scale, night)
    found = forecasts(
        known,
        progress,
        scale=scale,
        information=phase_information(table.phase_rad),
        widen=widen,
        goal=sequence.goal.kind,
        details=sequence.goal.details,
        seed=seed,
    )
    others = [] if scale is None or len(progress.hold_s) > 1 else alternatives(known, scale, float(progress.hold_s[0]))
    rehearsed: list[dict[str, Any]] = []
    if trials:
        with spread_over(jobs, cluster) as spread:
            if len(progress.hold_s) > 1:
                rehearsed.append(_rehearse_decay(known, progress, trials, seed, spread))
            if scale is not None:
                rehearsed.append(
                    _rehearse_signal(known, scale, played(order, table, sequence), found, trials, seed, spread)
                )
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


def _rehearse_decay(
    known: "Knowledge", progress: "Progress", trials: int, seed: int, spread: Callable[..., Any]
) -> dict[str, Any]:
    """Whole nights drawn and analysed: how far the coherence times found stray from the truth, against the forecast."""
    from functools import partial

    from planner.design.forecast.blocks import in_blocks
    from planner.design.forecast.curve import decay_errors
    from planner.design.forecast.rehearsal import Night, rehearse_coherence

    night = Night(hold_s=progress.hold_s, packets=progress.counts[-1], phases=int(progress.shots[0]))
    error = float(decay_errors(known, progress)["coherence time"][-1])
    shots = int((progress.counts[-1] * progress.shots).sum())
    return _compared(
        "coherence time",
        "s",
        lambda: in_blocks(partial(rehearse_coherence, rig=known, night=night), trials, seed, spread),
        known.coherence_s,
        error,
        shots,
    )


def _rehearse_signal(
    known: "Knowledge",
    scale: "Scale",
    night: "Played",
    found: "list[Forecast]",
    trials: int,
    seed: int,
    spread: Callable[..., Any],
) -> dict[str, Any]:
    """The same for the signal, along the running order and with the declared drift; the true signal is none."""
    from functools import partial

    from planner.design.forecast.blocks import in_blocks
    from planner.design.forecast.whole_nights import rehearse_signal

    task = partial(rehearse_signal, rig=known, scale=scale, night=night, signal=0.0)
    error = float(next(one for one in found if one.name == "signal").error[-1])
    return _compared("signal", "m/s^2", lambda: in_blocks(task, trials, seed, spread), 0.0, error, len(night.mid_s))


def _compared(
    name: str, unit: str, rehearse: Callable[[], "FloatArray"], truth: float, error: float, shots: int
) -> dict[str, Any]:
    import time

    import numpy as np

    began = time.perf_counter()
    values = rehearse()
    seconds = time.perf_counter() - began
    return {
        "quantity": name,
        "unit": unit,
        "trials": len(values),
        "mean": float(np.mean(values)),
        "rms_error": float(np.sqrt(np.mean((values - truth) ** 2))),
        "forecast_error": error,
        "shots_per_s": len(values) * shots / seconds,
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
    for rehearsal in summary["rehearsals"]:
        strays = f"{rehearsal['quantity']} strays {rehearsal['rms_error']:.3g} {rehearsal['unit']} from the truth"
        speed = f"{rehearsal['shots_per_s'] / 1e6:.0f} million shots a second"
        forecast = f"forecast {rehearsal['forecast_error']:.3g}"
        console.print(f"{rehearsal['trials']:,} rehearsed nights: {strays}, {forecast} ({speed})", markup=False)
    if summary["picture"]:
        console.print(f"picture: {summary['picture']}", markup=False, soft_wrap=True)

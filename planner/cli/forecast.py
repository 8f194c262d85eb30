"""`nightfringe forecast`: what a night will give, before it is run."""

import json
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.design.allocation.knowledge import Knowledge
    from planner.design.forecast.curve import Forecast, Plan
    from planner.design.forecast.target import Reached
    from planner.design.running_order import RunningOrder


@click.command()
@click.argument("file", type=click.Path())
@click.option(
    "--hours",
    type=click.FloatRange(min=0, min_open=True),
    help="length of the night [default: the sequence's; packets after it do not count]",
)
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="of the order and of rehearsals")
@click.option("--quick", is_flag=True, help="a quick order, as `order --quick` makes it")
@click.option("--trials", type=click.IntRange(0, 1_000_000), default=0, help="also rehearse so many whole nights")
@click.option(
    "--jobs", type=click.IntRange(1, 512), default=1, show_default=True, help="processes of this machine that rehearse"
)
@click.option(
    "--dask",
    metavar="ADDRESS",
    help="rehearse on the Dask cluster whose scheduler listens there; on trusted networks only: whoever reaches a "
    "scheduler can run programs on its machines",
)
@click.option("--picture", type=click.Path(), help="draw error against time: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object, in SI")
def command(
    file: str,
    hours: float | None,
    seed: int,
    quick: bool,
    trials: int,
    jobs: int,
    dask: str | None,
    picture: str | None,
    as_json: bool,
) -> None:
    """Forecast the errors of a night against time, with a band.

    The night's own order says which packets are complete when, and what the declared drift does to them. The band (90
    percent) is what the uncertainty of [expected] makes of it. Rehearsals draw every shot of every night, drift with
    it, and analyse it: a check of the formulas. Their numbers are the same on one core, on many, or on a cluster.
    """
    from planner.design.allocation.knowledge import knowledge_of
    from planner.design.forecast.curve import forecasts, plan_of
    from planner.design.forecast.night import night_of
    from planner.design.forecast.possible import check_known, check_length, check_question
    from planner.design.forecast.progress import times_of
    from planner.design.forecast.target import alternatives, drift_share, reached, target_of
    from planner.design.ordering import make_order
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    if picture is not None:
        from planner.plots.style import check_place

        check_place(picture)
    if dask is not None and (jobs > 1 or not trials):
        raise InputError("--dask says where --trials run: give --trials with it, and leave --jobs out")
    sequence = read_sequence(file)
    rig = rig_of(sequence)
    table = compile_sequence(sequence, rig).table
    known = knowledge_of(sequence, rig, float((table.duration_s - table.hold_s).mean()))
    length = hours if hours is not None else sequence.goal.hours
    if length is not None:
        check_length(table, sequence, length)
    order = make_order(table, sequence, seed=seed, effort="quick" if quick else "full")
    whole = night_of(order, table, sequence, rig)
    check_question(sequence, whole, known)
    last = float(whole.done_s.max())
    end = last if length is None else min(last, length * 3600)
    night = whole.until(end)
    plan = plan_of(sequence, night, known, times_of(night, end))
    check_known(plan_of(sequence, whole, known, times_of(whole)), plan, known)
    found = forecasts(plan, known, seed=seed)
    target = target_of(sequence, known)
    when = None if target is None else reached(plan, found, target)
    rehearsed = _rehearse(plan, known, trials, seed, jobs, dask) if trials else []
    if picture is not None:
        from planner.plots.forecast import figure
        from planner.plots.style import save

        save(figure(found, f"Forecast: {sequence.title}", target), picture)
    summary = {
        "title": sequence.title,
        "goal": sequence.goal.kind,
        "seed": seed,
        "hours": end / 3600,
        "plan_hours": last / 3600,
        "packets": int(plan.progress.counts[-1].sum()),
        "packets_planned": int(whole.packet[-1]) + 1,
        "quantities": [_document(one) for one in found],
        "target": None if when is None else _when(when),
        "alternatives": [vars(one) for one in alternatives(plan, known)],
        "widened_by_drift": drift_share(plan, known),
        "order": _figures(order),
        "rehearsals": {"trials": trials, "quantities": rehearsed} if trials else None,
        "picture": picture,
    }
    if as_json:
        click.echo(json.dumps(summary))
    else:
        from planner.cli.forecast_words import show

        show(summary, found)


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


def _when(reached: "Reached") -> dict[str, Any]:
    return {
        "quantity": reached.quantity,
        "target": reached.target,
        "unit": reached.unit,
        "reached_h": None if reached.reached_s is None else reached.reached_s / 3600,
        "nights_needed": reached.nights,
    }


def _figures(order: "RunningOrder") -> dict[str, float]:
    return {name: float(value) for name, value in order.figures.items()}


def _rehearse(
    plan: "Plan", known: "Knowledge", trials: int, seed: int, jobs: int, dask: str | None
) -> list[dict[str, Any]]:
    """Whole nights drawn and analysed: how far what they find strays from the truth, beside the forecast."""
    from functools import partial

    import numpy as np

    from planner.cli.workers import spread_over
    from planner.design.forecast.blocks import in_blocks
    from planner.design.forecast.curve import UNITS, best_signal_s, errors_of
    from planner.design.forecast.rehearsal import Rehearsal

    played = Rehearsal(night=plan.night, rig=known)
    followed = Rehearsal(night=plan.night.until(best_signal_s(plan, known)), rig=known)
    errors = errors_of(plan, known)
    signal = plan.goal.details.get("signal", 0.0)
    out = []
    with spread_over(jobs, dask) as spread:
        for names, truths, task in (
            (("coherence time", "population lifetime"), (known.coherence_s, known.lifetime_s), played.time_scales),
            (("signal",), (signal,), partial(followed.signals, signal=signal)),
        ):
            if names[0] not in errors:
                continue
            values = in_blocks(task, trials, seed, spread)
            for column, (name, truth) in enumerate(zip(names, truths, strict=True)):
                if name not in errors:
                    continue
                low, high = np.quantile(values[:, column], (0.05, 0.95))
                out.append(
                    {
                        "name": name,
                        "unit": UNITS[name],
                        "truth": truth,
                        "mean": float(values[:, column].mean()),
                        "rms_error": float(np.sqrt(np.mean((values[:, column] - truth) ** 2))),
                        "forecast_error": float(errors[name][-1]),
                        "low": float(low),
                        "high": float(high),
                    }
                )
    return out

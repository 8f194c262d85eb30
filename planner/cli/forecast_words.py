"""What `nightfringe forecast` prints for people: readable units, a few times through the night, plain words."""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from planner.design.forecast.curve import Forecast

TIMES_SHOWN = 6
ALTERNATIVES_SHOWN = 3
READABLE = {"m/s^2": (1e9, "nm/s^2"), "relative": (100.0, "%")}  # unit -> factor and unit for people


def readable(value: float, unit: str) -> str:
    """A value in a unit that people read: 35 nm/s^2, 1.3 %."""
    factor, name = READABLE.get(unit, (1.0, unit))
    return f"{value * factor:.3g} {name}"


def percent(share: float) -> str:
    """Two figures, and no exponent."""
    return f"{100 * share:.0f}" if share >= 0.1 else f"{100 * share:.2g}"


def show(summary: dict[str, Any], found: "list[Forecast]") -> None:
    """Print a forecast; `summary` as the JSON object has it."""
    from rich.console import Console

    console = Console(highlight=False)

    def say(words: str, style: str | None = None) -> None:
        console.print(words, markup=False, style=style, soft_wrap=True)

    say(f"{summary['title']}: {summary['hours']:.2f} h for the goal {summary['goal']}", "bold")
    if summary["packets"] < summary["packets_planned"]:
        say(
            f"the whole plan takes {summary['plan_hours']:.2f} h: {summary['packets']:,} of "
            f"{summary['packets_planned']:,} packets fit"
        )
    for one in found:
        console.print(_table(one))
        more = summary["widened_by_drift"].get(one.name)
        if more is not None and more > 0.0:
            say(f"drift widens it by {percent(more)} % in the end")
    for line in _target(summary["target"]) + _others(summary["alternatives"]) + _rehearsals(summary["rehearsals"]):
        say(line)
    if summary["picture"]:
        say(f"picture: {summary['picture']}")


def _table(one: "Forecast") -> Any:
    import numpy as np
    from rich.table import Table

    factor, unit = READABLE.get(one.unit, (1.0, one.unit))
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("after (h)", f"error of the {one.name} ({unit})", "90 % band"):
        table.add_column(heading, justify="right", no_wrap=True)
    for i in np.linspace(len(one.time_s) / TIMES_SHOWN - 1, len(one.time_s) - 1, TIMES_SHOWN).astype(int):
        known = bool(np.isfinite(one.error[i]))
        low, high = one.low[i] * factor, one.high[i] * factor
        band = f"{low:.3g} to {high:.3g}" if np.isfinite(high) else f"{low:.3g} or more" if np.isfinite(low) else ""
        table.add_row(f"{one.time_s[i] / 3600:.2f}", f"{one.error[i] * factor:.3g}" if known else "not yet", band)
    return table


def _target(target: dict[str, Any] | None) -> list[str]:
    if target is None:
        return []
    if target["reached_h"] is not None:
        when = f"reached after {target['reached_h']:.2f} h"
    elif target["nights_needed"] is not None:
        when = f"not reached in this night; about {target['nights_needed']:.2g} such nights reach it"
    else:
        when = "not reached in this night"
    return [f"target: {target['quantity']} to {readable(target['target'], target['unit'])}: {when}"]


def _others(alternatives: list[dict[str, Any]]) -> list[str]:
    better = [one for one in alternatives if one["hours_ratio"] < 1.0][:ALTERNATIVES_SHOWN]
    lines = [
        f"{one['words']} instead: {100 * (1 - one['hours_ratio']):.0f} % fewer hours for the same error"
        for one in better
    ]
    if alternatives and not better:
        one = alternatives[0]
        more = 100 * (one["hours_ratio"] - 1)
        lines = [f"no nearby plan is better; the nearest, {one['words']}, takes {more:.0f} % more hours"]
    return lines


def _rehearsals(rehearsed: dict[str, Any] | None) -> list[str]:
    if rehearsed is None:
        return []
    if not rehearsed["quantities"]:
        return ["no rehearsals: only coherence time, population lifetime and signal can be rehearsed"]
    return [
        f"{rehearsed['trials']:,} rehearsed nights: {one['name']} off by {readable(one['rms_error'], one['unit'])} "
        f"(RMS), forecast {readable(one['forecast_error'], one['unit'])}; of {readable(one['truth'], one['unit'])} "
        f"90 % find {readable(one['low'], one['unit'])} to {readable(one['high'], one['unit'])}"
        for one in rehearsed["quantities"]
    ]

"""The picture of a forecast: error against time, with its band and the target."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import COLOURS, GREY, SETTINGS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from planner.design.forecast.curve import Forecast

READABLE = {"m/s^2": (1e9, "nm/s²"), "relative": (100.0, "%")}
TOP = 6.0  # the axis ends at so many times the last error: the first minutes of a night would flatten the rest


def figure(found: "list[Forecast]", title: str, target: float | None = None) -> "Figure":
    """One panel for each quantity, the goal's own first; target: that of the first one, in its unit."""
    import matplotlib
    from matplotlib.figure import Figure

    with matplotlib.rc_context(SETTINGS):
        drawing = Figure(figsize=(6.4, 2.2 * len(found) + 1.0), layout="constrained")
        drawing.suptitle(title, x=0.01, ha="left", fontweight="bold")
        panels = np.atleast_1d(drawing.subplots(len(found), 1, sharex=True))
        for number, (panel, one) in enumerate(zip(panels, found, strict=True)):
            _panel(panel, one, COLOURS[number % len(COLOURS)], target if number == 0 else None)
        panels[-1].set_xlabel("rig time (h); the band holds 90 % of what is likely of the rig")
    return drawing


def _panel(panel: "Axes", one: "Forecast", colour: str, target: float | None) -> None:
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

    factor, unit = READABLE.get(one.unit, (1.0, one.unit))
    hours = np.r_[0.0, one.time_s] / 3600
    error, low, high = (np.r_[np.inf, values] * factor for values in (one.error, one.low, one.high))
    known = np.isfinite(error)
    panel.fill_between(hours[known], low[known], high[known], color=colour, alpha=0.2, linewidth=0)
    panel.plot(hours[known], error[known], color=colour)
    panel.set_yscale("log")
    panel.set_xlim(0.0, hours[-1])
    bottom, top = low[known][-1] * 0.85, TOP * error[known][-1]
    if target is not None:
        bottom, top = min(bottom, 0.85 * target * factor), max(top, 1.3 * target * factor)
        panel.axhline(target * factor, color=GREY, linestyle="--", linewidth=1.0)
        at = one.reached_s(target)
        if at is not None:
            panel.plot([at / 3600], [target * factor], marker="o", color=GREY, markersize=4)
        when = "not in this night" if at is None else f"after {at / 3600:.1f} h"
        panel.annotate(
            f"target {target * factor:.3g} {unit}: {when}",
            (hours[-1], target * factor),
            xytext=(-2, 3),
            textcoords="offset points",
            ha="right",
            color=GREY,
        )
    panel.set_ylim(bottom, top)
    panel.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 3.0, 5.0), numticks=20))
    panel.yaxis.set_minor_locator(NullLocator())
    panel.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    panel.set_title(f"Expected error of the {one.name}")
    panel.set_ylabel(unit)

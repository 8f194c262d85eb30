"""The picture of a forecast: error against time, with its band."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import COLOURS, SETTINGS

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from planner.design.forecast.curve import Forecast


def figure(found: "list[Forecast]", title: str) -> "Figure":
    """One panel for each quantity."""
    import matplotlib
    from matplotlib.figure import Figure
    from matplotlib.ticker import LogLocator, NullFormatter

    with matplotlib.rc_context(SETTINGS):
        drawing = Figure(figsize=(6.4, 2.4 * len(found) + 0.8), layout="constrained")
        drawing.suptitle(title, x=0.01, ha="left", fontweight="bold")
        panels = np.atleast_1d(drawing.subplots(len(found), 1, sharex=True))
        for panel, one, colour in zip(panels, found, COLOURS, strict=False):
            hours = one.time_s / 3600
            known = np.isfinite(one.error)
            panel.fill_between(hours[known], one.low[known], one.high[known], color=colour, alpha=0.2, linewidth=0)
            panel.plot(hours[known], one.error[known], color=colour)
            panel.set_yscale("log")
            panel.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
            panel.yaxis.set_major_formatter(lambda value, _: f"{value:g}")
            panel.yaxis.set_minor_formatter(NullFormatter())
            panel.set_title(f"Expected error of the {one.name}")
            panel.set_ylabel(one.unit)
        panels[-1].set_xlabel("rig time (h); the band holds 90 % of what is likely of the rig")
    return drawing

"""Fringes: population fraction against readout phase, one panel a hold, the phases of all packets brought together."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import BLUE, GREY, ORANGE, SETTINGS

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from planner.analysis.results import CurveResults

MOST_PANELS = 16
MOST_POINTS = 1500


def figure(curve: "CurveResults", title: str) -> "Figure":
    """One panel for each hold (16 at most, spread over the holds): every shot at its phase on its packet's own fringe.

    Args:
        curve: with shots to draw. title: name of the night.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    holds = curve.contrast
    drawn = curve.fringe_shots
    with mpl.rc_context(SETTINGS):
        every = np.unique(drawn.hold_s)
        chosen = every[np.unique(np.linspace(0, len(every) - 1, min(MOST_PANELS, len(every))).astype(int))]
        across = min(4, len(chosen))
        down = -(-len(chosen) // across)
        whole = Figure(figsize=(2.2 * across + 0.6, 1.75 * down + 0.9), layout="constrained")
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        panels = whole.subplots(down, across, sharex=True, sharey=True, squeeze=False).ravel()
        for axes, hold in zip(panels, chosen, strict=False):
            here = np.flatnonzero(drawn.hold_s == hold)
            here = here[:: max(1, len(here) // MOST_POINTS)]
            turn = np.mod(drawn.phase_rad[here], 2 * np.pi) / np.pi
            axes.plot(turn, drawn.fraction[here], ".", color=BLUE, markersize=4.0, alpha=0.6)
            contrast = 0.0 if holds is None else float(holds.value[np.argmin(np.abs(holds.hold_s - hold))])
            fine = np.linspace(0, 2, 181)
            axes.plot(fine, 0.5 + contrast / 2 * np.cos(np.pi * fine), color=ORANGE, linewidth=1.6)
            axes.axhline(0.5, color=GREY, linewidth=0.6)
            axes.set_title(f"{hold:.3g} s: C = {contrast:.3f}", fontsize=9)
            axes.set_ylim(0, 1)
            axes.set_xticks([0, 1, 2])
        for axes in panels[len(chosen) :]:
            axes.set_axis_off()
        whole.supxlabel("phase on the packet's own fringe (units of pi rad)", fontsize=9.5)
        whole.supylabel("population fraction about the packet's offset", fontsize=9.5)
        return whole

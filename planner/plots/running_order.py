"""A running order at a glance: which hold ran when, in which state of the switches."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import BLUE, GREY, SETTINGS, VERMILION

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from planner.design.running_order import RunningOrder
    from planner.sequence.model import Sequence
    from planner.sequence.table import ShotTable

MOST_SHOTS = 20_000  # more than that is a solid block of ink


def figure(order: "RunningOrder", table: "ShotTable", sequence: "Sequence", title: str) -> "Figure":
    """Hold against time for every shot, coloured by the wanted parity; below, each switch's state.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    shown = slice(None, None, max(1, len(order) // MOST_SHOTS))
    rows = order.shot[shown]
    hours = ((order.start_s + order.settle_s + order.duration_s / 2) / 3600.0)[shown]
    names = list(table.switches)
    wanted = [name for name in names if name in sequence.goal.wanted]
    sign = np.prod([table.switches[name][rows] for name in wanted], axis=0) if wanted else np.ones(len(rows))
    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(9.0, 3.4 + 0.5 * len(names)), layout="constrained")
        panels = whole.subplots(
            1 + len(names), 1, sharex=True, squeeze=False, height_ratios=[3.0, *(0.45 for _ in names)]
        ).ravel()
        labels = {1: f"{' x '.join(wanted)} +" if wanted else "", -1: f"{' x '.join(wanted)} -"}
        for state, colour in ((1, BLUE), (-1, VERMILION)):
            here = sign == state
            if here.any():
                panels[0].plot(
                    hours[here], table.hold_s[rows][here], ".", color=colour, markersize=3.0, label=labels[state]
                )
        every = np.unique(table.hold_s)
        panels[0].set_yscale("log")
        panels[0].minorticks_off()
        ticks = every[np.unique(np.linspace(0, len(every) - 1, min(12, len(every))).astype(int))]
        panels[0].set_yticks(ticks, [f"{hold:.3g}" for hold in ticks])
        panels[0].set_ylim(every[0] / 1.4, every[-1] * 1.9)
        panels[0].set_ylabel("hold (s)")
        panels[0].set_title(title)
        if wanted:
            panels[0].legend(loc="upper right", ncols=2)
        for axes, name in zip(panels[1:], names, strict=True):
            axes.plot(hours, table.switches[name][rows], drawstyle="steps-mid", color=GREY, linewidth=0.7)
            axes.set_yticks([-1, 1], [sequence.switches[name].states[1], sequence.switches[name].states[0]])
            axes.set_ylim(-1.4, 1.4)
            axes.set_ylabel(name, rotation=0, ha="right", va="center")
        panels[-1].set_xlabel("time from the night's start (h)")
        return whole

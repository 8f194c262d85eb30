"""A running order at a glance: which hold ran when, in which state of the switches."""

from collections.abc import Sequence as Items
from typing import TYPE_CHECKING

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.plots.style import BLUE, GREY, SETTINGS, VERMILION

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from planner.design.merging import Part
    from planner.design.running_order import RunningOrder

MOST_SHOTS = 20_000  # more than that is a solid block of ink


def figure(order: "RunningOrder", parts: "Items[Part]") -> "Figure":
    """Hold against time for every shot, coloured by the wanted parity, a panel a request; below, each switch's state.

    Check shots are crosses.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    shown = np.arange(0, len(order), max(1, len(order) // MOST_SHOTS))
    hours = ((order.start_s + order.settle_s + order.duration_s / 2) / 3600.0)[shown]
    switches = {name: switch for part in parts for name, switch in part.sequence.switches.items()}
    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(9.0, 1.0 + 2.4 * len(parts) + 0.5 * len(switches)), layout="constrained")
        ratios = [3.0] * len(parts) + [0.45] * len(switches)
        panels = whole.subplots(len(ratios), 1, sharex=True, squeeze=False, height_ratios=ratios).ravel()
        for number, part in enumerate(parts):
            mine = order.request[shown] == number
            _shots(panels[number], hours[mine], order.shot[shown][mine], part)
        for axes, (name, switch) in zip(panels[len(parts) :], switches.items(), strict=True):
            state = np.zeros(len(shown))
            for number, part in enumerate(parts):
                if name in part.table.switches:
                    mine = order.request[shown] == number
                    state[mine] = part.table.switches[name][order.shot[shown][mine]]
            said = state != 0
            axes.plot(hours[said], state[said], drawstyle="steps-post", color=GREY, linewidth=0.7)
            axes.set_yticks([-1, 1], [switch.states[1], switch.states[0]])
            axes.set_ylim(-1.4, 1.4)
            axes.set_ylabel(name, rotation=0, ha="right", va="center")
        panels[-1].set_xlabel("time from the night's start (h)")
        return whole


def _shots(axes: "Axes", hours: FloatArray, rows: IntArray, part: "Part") -> None:
    table = part.table
    wanted = [name for name in table.switches if name in part.sequence.goal.wanted]
    sign = np.prod([table.switches[name][rows] for name in wanted], axis=0) if wanted else np.ones(len(rows))
    checks = table.cell[rows] < 0
    labels = {1: f"{' x '.join(wanted)} +" if wanted else "measured", -1: f"{' x '.join(wanted)} -"}
    for state, colour in ((1, BLUE), (-1, VERMILION)):
        here = (sign == state) & ~checks
        if here.any():
            axes.plot(hours[here], table.hold_s[rows][here], ".", color=colour, markersize=3.0, label=labels[state])
    if checks.any():
        axes.plot(hours[checks], table.hold_s[rows][checks], "x", color=GREY, markersize=4.0, label="check shots")
    every = np.unique(table.hold_s)
    axes.set_yscale("log")
    axes.minorticks_off()
    ticks = every[np.unique(np.linspace(0, len(every) - 1, min(12, len(every))).astype(int))]
    axes.set_yticks(ticks, [f"{hold:.3g}" for hold in ticks])
    axes.set_ylim(every[0] / 1.4, every[-1] * 1.9)
    axes.set_ylabel("hold (s)")
    axes.set_title(part.sequence.title)
    if wanted or checks.any():
        axes.legend(loc="upper right", ncols=3)

"""The path of the fringe's phase through the night, and how far each packet lay from where it was expected."""

from typing import TYPE_CHECKING, Any

import numpy as np

from planner.plots.style import COLOURS, GREY, MARKERS, SETTINGS

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from planner.analysis.night_fringes import FringeReport

MOST_HOLDS = 6  # that have a colour and a line of their own in the legend


def figure(report: "FringeReport", title: str) -> "Figure":
    """Two panels over the night's hours: the phase followed, about the mean of each hold, and what each packet was off.

    Args:
        report: with a path. title: name of the night.

    Returns:
        A figure that belongs to no window.

    Raises:
        ValueError: the report has no path.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    packets, path = report.packets, report.followed
    if packets is None or path is None:
        raise ValueError("a report without a path cannot be drawn")
    hours = packets.time_s / 3600
    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(7.2, 5.6), layout="constrained")
        top, bottom = whole.subplots(2, 1, sharex=True, height_ratios=[2, 1])
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        holds = np.unique(packets.hold)
        for number, hold in enumerate(holds):
            here = packets.hold == hold
            look: dict[str, Any] = {"color": COLOURS[number % len(COLOURS)], "marker": MARKERS[number % len(MARKERS)]}
            if len(holds) > MOST_HOLDS:  # too many to tell apart: shades from short to long
                look = {"color": mpl.colormaps["viridis"](number / (len(holds) - 1)), "marker": "o"}
            named = len(holds) <= MOST_HOLDS or number in (0, len(holds) - 1)
            moved = path.phase_rad[here] - np.average(path.phase_rad[here], weights=packets.sigma_rad[here] ** -2)
            top.errorbar(
                hours[here],
                moved,
                packets.sigma_rad[here],
                linestyle="none",
                markersize=4,
                elinewidth=0.8,
                label=f"{report.packet_hold_s[here][0]:.4g} s" if named else None,
                **look,
            )
            bottom.plot(hours[here], path.surprise[here], linestyle="none", markersize=3.5, **look)
        doubtful = path.chance < 0.99
        if doubtful.any():
            bottom.plot(
                hours[doubtful],
                path.surprise[doubtful],
                "x",
                color="black",
                label="turn or slope in doubt",
            )
            bottom.legend(fontsize=8.5, loc="upper right")
        top.set_ylabel("phase about its hold's mean (rad)")
        top.set_title("Phase followed through whole turns, common to all switch states")
        top.legend(title="hold", fontsize=8.5, ncols=min(len(holds), 6), loc="best")
        for height in (-2, 2):
            bottom.axhline(height, color=GREY, linewidth=0.7, linestyle="--")
        bottom.set_ylabel("off, in sigma")
        bottom.set_title("Each packet against where the path expected it (dashes: two standard deviations)")
        bottom.set_xlabel("hours since the night began")
        return whole

"""The tide at a site over a night, in acceleration and in fringe phase."""

from typing import TYPE_CHECKING

from planner.plots.style import BLUE, COLOURS, GREY, SETTINGS

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from planner.arrays import FloatArray


def figure(
    hours: "FloatArray", change: "FloatArray", scales: list[tuple[float, float]], title: str, axis: str
) -> "Figure":
    """One panel, or two where holds are given.

    Args:
        hours: (n_time,). change: of g along the axis, m/s^2, (n_time,). scales: holds in s and their phase per
        acceleration, rad per m/s^2. title, axis: words for the picture and its time axis.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(7.2, 5.4 if scales else 3.2), layout="constrained")
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        panels = whole.subplots(2 if scales else 1, 1, sharex=True, squeeze=False)[:, 0]
        panels[0].plot(hours, change * 1e9, color=BLUE, linewidth=1.6)
        panels[0].axhline(0, color=GREY, linewidth=0.7)
        panels[0].set_ylabel("change of g (nm/s$^2$)")
        panels[0].set_title("Solid-earth tide along the lattice, positive where g grows")
        for number, (hold, scale) in enumerate(scales):
            panels[1].plot(
                hours,
                scale * (change - change[0]),
                color=COLOURS[number % len(COLOURS)],
                linewidth=1.4,
                label=f"{hold:.4g} s",
            )
        if scales:
            panels[1].set_ylabel("fringe phase (rad)")
            panels[1].set_title("What it moves the fringe of each hold by, from the start")
            panels[1].legend(title="hold", fontsize=8.5)
        panels[-1].set_xlabel(axis)
        return whole

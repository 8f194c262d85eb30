"""Contrast against hold with every shape that was fitted to it, and a modulation's periods where one was looked for."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import BLUE, COLOURS, GREY, SETTINGS, VERMILION

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from planner.analysis.decay import Decay
    from planner.analysis.holds import HoldContrast
    from planner.analysis.modulation import Modulation


def figure(holds: "HoldContrast", fits: "tuple[Decay, ...]", modulation: "Modulation | None", title: str) -> "Figure":
    """Points with 95 % intervals, the best shape's curve with its band, the others as thin lines; below it the gain of
    each period.

    Args:
        holds: contrast per hold. fits: best first. modulation: of the first fit, or None. title: name of the night.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    searched = modulation is not None and len(modulation.periods_s) > 1
    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(7.2, 6.4 if searched else 4.2), layout="constrained")
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        panels = whole.subplots(2 if searched else 1, 1, squeeze=False)[:, 0]
        _shapes(panels[0], holds, fits)
        if searched and modulation is not None:
            _periods(panels[1], modulation)
        return whole


def _shapes(axes: "Axes", holds: "HoldContrast", fits: "tuple[Decay, ...]") -> None:
    fine = np.linspace(0, holds.hold_s.max() * 1.03, 400)
    for number, fit in enumerate(fits):
        named = f"{fit.shape.words}: 1/e at {fit.time_s:.4g} s"
        if number == 0:
            low, high = fit.band(fine)
            axes.fill_between(fine, low, high, color=BLUE, alpha=0.2, linewidth=0)
            axes.plot(fine, fit.value(fine), color=BLUE, linewidth=1.8, label=named)
        else:
            colour = COLOURS[1 + (number - 1) % (len(COLOURS) - 1)]
            axes.plot(fine, fit.value(fine), color=colour, linewidth=0.9, linestyle="--", label=named)
    shown = np.where(holds.p_zero < 0.05, holds.value, holds.low)
    axes.errorbar(
        holds.hold_s,
        shown,
        [np.maximum(shown - holds.low, 0), np.maximum(holds.high - shown, 0)],
        fmt="o",
        color="black",
        markersize=4,
    )
    axes.set_xlabel("hold (s)")
    axes.set_ylabel("contrast")
    axes.set_ylim(bottom=0)
    axes.set_title("Contrast with every shape fitted, the best with its 95 % band")
    axes.legend(fontsize=8.5)


def _periods(axes: "Axes", modulation: "Modulation") -> None:
    axes.plot(modulation.periods_s, modulation.gains, color=BLUE, linewidth=1.0)
    axes.axhline(
        modulation.alarm_gain, color=VERMILION, linestyle="--", linewidth=1.0, label="1 % of nights without one"
    )
    axes.axvline(modulation.period_s, color=GREY, linewidth=0.8)
    axes.set_xscale("log")
    axes.xaxis.set_major_formatter(lambda value, _: f"{value:g}")
    axes.xaxis.set_minor_formatter(lambda value, _: f"{value:g}")
    axes.set_xlabel("period of a modulation (s of hold)")
    axes.set_ylabel("gain")
    axes.set_title(f"Modulation: best at {modulation.period_s:.3g} s, p = {modulation.p:.2g} over all periods")
    axes.legend(fontsize=8.5)

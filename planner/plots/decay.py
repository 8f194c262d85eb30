"""Contrast and atom number against hold, one above the other, each with its own time scale."""

from typing import TYPE_CHECKING

import numpy as np

from planner.plots.style import COLOURS, GREY, MARKERS, SETTINGS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from planner.analysis.decay import Decay
    from planner.analysis.results import CurveResults, NightResults


def figure(results: "NightResults", title: str) -> "Figure":
    """Two panels over one logarithmic hold axis: points with 95 % intervals, fitted curves with their bands.

    Args:
        results: at least one curve. title: name of the night.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure
    from matplotlib.ticker import LogLocator, NullFormatter

    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(7.2, 6.4), layout="constrained")
        top, bottom = whole.subplots(2, 1, sharex=True)
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        for number, curve in enumerate(results.curves):
            colour, marker = COLOURS[number % len(COLOURS)], MARKERS[number % len(MARKERS)]
            name = label(curve, len(results.curves) > 1)
            _contrast(top, curve, colour, marker, name)
            _atoms(bottom, curve, colour, marker, name)
        top.set_ylabel("contrast")
        top.set_ylim(bottom=0)
        top.set_title("Contrast: from squared contrast of packets, noise bias taken off")
        bottom.set_ylabel("detected atoms")
        bottom.set_title("Atom number: slow drift of the night taken out")
        bottom.set_yscale("log")
        bottom.set_xscale("log")
        bottom.set_xlabel("hold (s); bars and bands are 95 % intervals, dashes mark the time scales")
        for axes in (top, bottom):
            if axes.get_legend_handles_labels()[0]:
                axes.legend(loc="lower left", fontsize=8.5)
        for axis in (bottom.xaxis, bottom.yaxis):
            axis.set_major_locator(LogLocator(subs=(1, 2, 5)))
            axis.set_major_formatter(lambda value, _: f"{value:,g}")
            axis.set_minor_formatter(NullFormatter())
        return whole


def label(curve: "CurveResults", several: bool) -> str:
    """What tells this curve from the others."""
    if not several:
        return ""
    settings = ", ".join(f"{name} {value:.4g}" for name, value in curve.settings.items())
    return settings or f"request {curve.request + 1}"


def time_scale(decay: "Decay | None", name: str) -> str:
    """`coherence time 20.1 s (19.4 to 20.8 s)`; open ends in words."""
    if decay is None:
        return f"no {name}"
    if np.isinf(decay.time_s):
        return f"{name}: above {decay.low_s:.3g} s"
    upper = f"to {decay.high_s:.3g} s" if np.isfinite(decay.high_s) else "and up"
    return f"{name} {decay.time_s:.3g} s ({decay.low_s:.3g} {upper})"


def _contrast(axes: "Axes", curve: "CurveResults", colour: str, marker: str, name: str) -> None:
    holds = curve.contrast
    if holds is None:
        return
    error = np.maximum([holds.value - holds.low, holds.high - holds.value], 0)
    words = ": ".join(filter(None, [name, time_scale(curve.coherence, "coherence time")]))
    axes.errorbar(
        holds.hold_s, holds.value, yerr=error, fmt=marker, color=colour, markersize=4.5, linewidth=1.1, label=words
    )
    _curve(axes, curve.coherence, holds.hold_s, colour)


def _atoms(axes: "Axes", curve: "CurveResults", colour: str, marker: str, name: str) -> None:
    holds = curve.atoms
    if holds is None:
        return
    words = ": ".join(filter(None, [name, time_scale(curve.lifetime, "population lifetime")]))
    error = [holds.atoms - holds.low, holds.high - holds.atoms]
    axes.errorbar(
        holds.hold_s, holds.atoms, yerr=error, fmt=marker, color=colour, markersize=4.5, linewidth=1.1, label=words
    )
    _curve(axes, curve.lifetime, holds.hold_s, colour)


def _curve(axes: "Axes", decay: "Decay | None", hold_s: "np.ndarray", colour: str) -> None:
    if decay is None:
        return
    least = max(float(hold_s.min()), 1e-3 * float(hold_s.max()))
    fine = np.geomspace(least, hold_s.max(), 300)
    low, high = decay.band(fine)
    axes.fill_between(fine, low, high, color=colour, alpha=0.18, linewidth=0)
    axes.plot(fine, decay.value(fine), color=colour, linewidth=1.4)
    if np.isfinite(decay.time_s) and least < decay.time_s < hold_s.max():
        axes.axvline(decay.time_s, color=GREY, linewidth=0.8, linestyle=(0, (4, 3)))

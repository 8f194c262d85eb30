"""A night's steadiness: the series, its deviations against averaging time, and its rhythms."""

from typing import TYPE_CHECKING

import numpy as np

from planner.analysis.stability_series import UNITS
from planner.plots.style import BLUE, GREY, SETTINGS, VERMILION

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from planner.analysis.stability import NightStability


def figure(night: "NightStability", title: str) -> "Figure":
    """Three panels: values against time, deviations with 95 % bands against averaging time, power against period.

    Args:
        night: what the night says of one series. title: name of the night.

    Returns:
        A figure that belongs to no window.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    with mpl.rc_context(SETTINGS):
        whole = Figure(figsize=(7.2, 8.4), layout="constrained")
        series, deviations, rhythms = whole.subplots(3, 1, height_ratios=[2, 4, 3])
        whole.suptitle(title, x=0.01, ha="left", fontsize=11.5, fontweight="bold")
        _series(series, night)
        _deviations(deviations, night)
        _rhythms(rhythms, night)
        return whole


def _label(night: "NightStability", text: str = "") -> str:
    unit = night.series.unit
    return f"{text or night.series.name}{f' ({unit})' if unit else ''}"


def _series(axes: "Axes", night: "NightStability") -> None:
    hours = night.clock.time_s / 3600
    axes.plot(hours, night.series.values, ".", color=BLUE, markersize=3.5)
    name = night.series.name
    axes.set_title(f"{name.capitalize() if name in UNITS else name} of each packet")
    axes.set_xlabel("time from the night's start (h)")
    axes.set_ylabel(_label(night))
    axes.margins(x=0.01)


def _deviations(axes: "Axes", night: "NightStability") -> None:
    found = night.stability
    kinds = (("Allan, overlapping", found.allan, BLUE, "o", 0.985), ("Hadamard", found.hadamard, VERMILION, "s", 1.015))
    for name, curve, colour, marker, aside in kinds:
        there = np.isfinite(curve.value)
        if not there.any():
            continue
        value = curve.value[there]
        reach = np.stack([value - curve.low[there], curve.high[there] - value])
        axes.errorbar(
            found.tau_s[there] * aside,
            value,
            yerr=reach,
            fmt=f"{marker}-",
            color=colour,
            markersize=4,
            linewidth=1,
            label=name,
        )
    reference = found.limit
    if np.isfinite(reference).all():
        multiple = found.multiple
        words = rf"shot-noise limit, as $1/\sqrt{{\tau}}$: Allan is {multiple[0]:.2g} to {multiple[-1]:.2g} x"
    else:
        reference = found.allan.value[0] / np.sqrt(found.factor)
        words = r"white noise falls as $1/\sqrt{\tau}$"
    axes.plot(found.tau_s, reference, color=GREY, linestyle=(0, (4, 3)), label=words)
    axes.set_xscale("log")
    axes.set_yscale("log")
    # an open band at the last times would squeeze all the rest
    values = np.concatenate([found.allan.value, found.hadamard.value, reference, found.allan.low])
    values = values[np.isfinite(values) & (values > 0)]
    highest = np.nanmax(np.concatenate([found.allan.value, found.hadamard.value, found.allan.high[:3]]))
    lowest = float(values.min())
    room = (3 * highest / lowest) ** 0.13  # for the legend's one line below the curves
    axes.set_ylim(lowest / (1.2 * room), highest * 3)
    _plain_ticks(axes)
    axes.set_title("Difference of neighbouring averages; bars are 95 % bands")
    axes.set_xlabel("averaging time (s)")
    axes.set_ylabel(_label(night, "deviation"))
    axes.legend(loc="lower left", fontsize=8.5, ncols=3)


def _rhythms(axes: "Axes", night: "NightStability") -> None:
    spectrum = night.spectrum
    minutes = 1 / spectrum.frequency_hz / 60
    axes.plot(minutes, spectrum.power, color=BLUE, linewidth=0.9)
    axes.axhline(night.alarm, color=VERMILION, linewidth=1, linestyle=(0, (4, 3)))
    axes.set_xscale("log")
    axes.set_xlim(minutes.min(), minutes.max())
    axes.set_ylim(0, max(1.25 * night.alarm, 1.1 * float(spectrum.power.max())))
    _plain_ticks(axes, y=False)
    axes.set_title("Rhythms: share that one sinusoid explains; white noise passes the dashes in 1 night of 100")
    axes.set_xlabel("period (min)")
    axes.set_ylabel("share")


def _plain_ticks(axes: "Axes", *, y: bool = True) -> None:
    from matplotlib.ticker import LogLocator, NullFormatter

    for axis in (axes.xaxis, axes.yaxis) if y else (axes.xaxis,):
        axis.set_major_locator(LogLocator(subs=(1, 2, 5)))
        axis.set_major_formatter(lambda value, _: f"{value:,g}")
        axis.set_minor_formatter(NullFormatter())

"""Stability: all deviations with bands, the spectrum, and a large night whole, against the number of shots."""

import time
from collections.abc import Callable
from typing import Any

import numpy as np

from planner.analysis.allan import allan, octaves
from planner.analysis.data import NightData
from planner.analysis.stability import deviations, stability_of
from planner.analysis.stability_spectrum import lomb_scargle
from tests.analysis.nights import night


def seconds(work: Callable[[], object]) -> float:
    """Least process time of three goes."""
    times = []
    for _ in range(3):
        began = time.process_time()
        work()
        times.append(time.process_time() - began)
    return min(times)


def row(name: str, value: float, limit: float, reference: float | None = None) -> dict[str, Any]:
    return {
        "name": name,
        "value": value,
        "unit": "s",
        "bound": f"<= {limit:g}",
        "reference": reference,
        "ratio": None if reference is None else value / reference,
        "ok": value <= limit,
    }


def rows() -> list[dict[str, Any]]:
    import allantools

    rng = np.random.default_rng(1)
    series = rng.standard_normal(100_000) + 0.01 * np.cumsum(rng.standard_normal(100_000))
    factors = octaves(len(series))
    theirs = seconds(lambda: allantools.oadev(series, rate=1.0, data_type="freq", taus=factors.astype(float)))
    t = np.cumsum(rng.uniform(0.5, 1.5, len(series)))
    large = night(1, packets=1042, phases=8)
    large["reading_tilt"] = rng.standard_normal(len(large["key"]))
    data = NightData.from_columns(large)
    return [
        row(
            "overlapping Allan of 100,000 values at octaves; allantools beside",
            seconds(lambda: allan(series, factors)),
            0.5,
            theirs,
        ),
        row("four deviations with bands of 100,000 values", seconds(lambda: deviations(series, 1.0)), 1.0),
        row("spectrum of 100,000 values at irregular times", seconds(lambda: lomb_scargle(t, series)), 3.0),
        row(
            f"a night of {len(data):,} shots: contrast, whole with one reading",
            seconds(lambda: stability_of(data, "contrast")),
            10.0,
        ),
    ]

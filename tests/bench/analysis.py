"""Analysis: fringes a second, and a large night whole."""

import time
from typing import Any

import numpy as np

from planner.analysis.data import NightData
from planner.analysis.fringe import contrasts, fit_fringes
from planner.analysis.results import summarise
from tests.analysis.nights import night


def row(name: str, value: float, unit: str, bound: str, ok: bool, reference: float | None) -> dict[str, Any]:
    ratio = None if not reference else value / reference
    return {
        "name": name,
        "value": value,
        "unit": unit,
        "bound": bound,
        "reference": reference,
        "ratio": ratio,
        "ok": ok,
    }


def fringes_per_second(count: int) -> float:
    """Fits with covariance, contrast, its interval and its zero test, of eight-shot fringes; best of three."""
    rng = np.random.default_rng(1)
    theta = np.tile(np.arange(8) * np.pi / 4, count)
    group = np.repeat(np.arange(count), 8)
    y = 0.5 + 0.1 * np.cos(theta) + 0.03 * rng.standard_normal(len(theta))
    variance = np.full(len(theta), 9e-4)
    contrasts(fit_fringes(theta[:80000], y[:80000], variance[:80000], group[:80000], 10000))  # makes the tables once
    times = []
    for _ in range(3):
        began = time.process_time()
        contrasts(fit_fringes(theta, y, variance, group, count))
        times.append(time.process_time() - began)
    return count / min(times)


def solver_per_second(count: int) -> float:
    """The same fits one by one with numpy's least squares, without intervals: the reference."""
    theta = np.arange(8) * np.pi / 4
    design = np.stack([np.ones(8), np.cos(theta), np.sin(theta)], axis=1)
    y = np.random.default_rng(1).uniform(0.3, 0.7, (count, 8))
    began = time.process_time()
    for values in y:
        np.linalg.lstsq(design, values, rcond=None)
    return count / (time.process_time() - began)


def rows() -> list[dict[str, Any]]:
    one_by_one = solver_per_second(5000)
    small, large = fringes_per_second(20_000), fringes_per_second(200_000)
    data = NightData.from_columns(night(1, packets=2084))
    began = time.process_time()
    summarise(data)
    whole = time.process_time() - began
    return [
        row("fringe fits with intervals", large, "1/s, one core", ">= 50000", large >= 50_000, one_by_one),
        row(
            "time of ten times the fringes, over ten times the time",
            small / large,
            "",
            "<= 1.5",
            small / large <= 1.5,
            None,
        ),
        row(f"a night of {len(data):,} shots summed up", whole, "s", "<= 5", whole <= 5, None),
    ]

"""Allocation: proved efficiency, loss by rounding, and time, for every goal."""

import time
from collections.abc import Callable
from typing import Any

import numpy as np

from planner.design.allocation.decay import allocate_coherence, allocate_curve, allocate_plateau, allocate_revival
from planner.design.allocation.result import Allocation
from planner.design.allocation.signal import allocate_signal
from tests.design.test_allocation import RIG, SCALE

GOALS: dict[str, Callable[[], Allocation]] = {
    "coherence": lambda: allocate_coherence(RIG, 10.0),
    "both time scales": lambda: allocate_coherence(RIG, 10.0, lifetime_weight=1.0),
    "curve": lambda: allocate_curve(RIG, 10.0, np.geomspace(0.5, 50, 8)),
    "plateau": lambda: allocate_plateau(RIG, 10.0, plateau=0.06),
    "revival": lambda: allocate_revival(RIG, 10.0, period_s=0.8, depth=0.05),
    "signal": lambda: allocate_signal(RIG, SCALE, 10.0, largest=1e-7),
}


def rows() -> list[dict[str, Any]]:
    found = []
    for name, goal in GOALS.items():
        began = time.perf_counter()
        answer = goal()
        seconds = time.perf_counter() - began
        for what, value, unit, bound, good in (
            ("proved efficiency", answer.certificate.efficiency, "", ">= 0.99", answer.certificate.efficiency >= 0.99),
            ("efficiency in whole packets", answer.rounded, "", ">= 0.97", answer.rounded >= 0.97),
            ("time", seconds, "s", "<= 3", seconds <= 3.0),
        ):
            found.append(
                {
                    "name": f"allocation, {name}: {what}",
                    "value": value,
                    "unit": unit,
                    "bound": bound,
                    "reference": None,
                    "ratio": None,
                    "ok": bool(good),
                }
            )
    return found

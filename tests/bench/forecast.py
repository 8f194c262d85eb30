"""Speed of rehearsals: shots a second on one core, and that twice the nights take twice the time."""

import time
from collections.abc import Iterator
from functools import partial
from typing import Any

from planner.design.forecast.blocks import in_blocks
from planner.design.forecast.rehearsal import rehearse_coherence
from planner.design.forecast.whole_nights import rehearse_signal
from tests.design.forecasting import plan

TRIALS = 4000


def rows() -> Iterator[dict[str, Any]]:
    here, other = plan("hold-scan"), plan("signal")
    tasks = {
        "coherence time": (partial(rehearse_coherence, rig=here.known, night=here.packets), here.shots),
        "signal with drift": (
            partial(rehearse_signal, rig=other.known, scale=other.scale, night=other.night, signal=0.0),
            len(other.night.mid_s),
        ),
    }
    for name, (task, shots) in tasks.items():
        in_blocks(task, 500, 1)
        seconds = []
        for trials in (TRIALS, 2 * TRIALS):
            began = time.perf_counter()
            in_blocks(task, trials, 1)
            seconds.append(time.perf_counter() - began)
        speed = 2 * TRIALS * shots / seconds[1]
        yield {
            "name": f"rehearsed shots, {name}, one core",
            "value": speed / 1e6,
            "unit": "million/s",
            "bound": ">= 2",
            "reference": None,
            "ratio": None,
            "ok": speed >= 2e6,
        }
        yield {
            "name": f"time of twice the nights, {name}",
            "value": seconds[1] / seconds[0],
            "unit": "times",
            "bound": "<= 2.3",
            "reference": 2.0,
            "ratio": seconds[1] / seconds[0] / 2.0,
            "ok": seconds[1] / seconds[0] <= 2.3,
        }

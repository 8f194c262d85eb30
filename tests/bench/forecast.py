"""Forecast: rehearsed shots a second on one core, how their time grows, and the command as a whole."""

import subprocess
import sys
import time
from collections.abc import Callable
from functools import partial
from typing import Any

from planner.arrays import FloatArray
from planner.design.forecast.blocks import in_blocks
from planner.design.forecast.rehearsal import Rehearsal
from tests.design.forecast_nights import hold_scan, night_a, night_b
from tests.figures import ROOT

TRIALS = 2000
LEAST = 2e6  # shots a second


def seconds(task: Any) -> tuple[float, float, float]:
    """Wall time of the trials, and CPU time of them and of twice as many; best of five, turn about.

    Other programs can only make a run slower, and the wall time of one run much more than that of the next.
    """

    def once(trials: int) -> tuple[float, float]:
        wall, cpu = time.perf_counter(), time.process_time()
        in_blocks(task, trials, 1)
        return time.perf_counter() - wall, time.process_time() - cpu

    runs = [(once(TRIALS), once(2 * TRIALS)) for _ in range(5)]
    return min(one[0] for one, _ in runs), min(one[1] for one, _ in runs), min(two[1] for _, two in runs)


def rows() -> list[dict[str, Any]]:
    def row(name: str, value: float, unit: str, bound: str, ok: bool, reference: float | None = None) -> dict[str, Any]:
        ratio = None if reference is None else value / reference
        return {
            "name": f"forecast: {name}",
            "value": value,
            "unit": unit,
            "bound": bound,
            "reference": reference,
            "ratio": ratio,
            "ok": bool(ok),
        }

    found = []
    (a, rig_a, _), (b, rig_b, _), (scan, rig_scan, _) = night_a(), night_b(), hold_scan()
    tasks: list[tuple[str, int, Callable[..., FloatArray]]] = [
        ("time scales, night A, drift drawn", len(a), Rehearsal(night=a, rig=rig_a).time_scales),
        ("time scales, night A, no drift", len(a), Rehearsal(night=a.without_drift(), rig=rig_a).time_scales),
        ("signal, night B, drift drawn", len(b), partial(Rehearsal(night=b, rig=rig_b).signals, signal=1e-8)),
        ("time scales, hold scan, drift drawn", len(scan), Rehearsal(night=scan, rig=rig_scan).time_scales),
    ]
    for name, shots, task in tasks:
        wall, once, twice = seconds(task)
        rate = TRIALS * shots / wall
        found.append(row(f"{name}: rehearsed shots on one core", rate / 1e6, "million/s", ">= 2", rate >= LEAST))
        found.append(row(f"{name}: CPU time of twice the trials", twice, "s", "<= 2.2 x", twice <= 2.2 * once, once))
    for name, arguments, most in (
        ("command, signal", ["signal.toml"], 60.0),
        ("command, signal, quick order", ["signal.toml", "--quick"], 15.0),
        ("command, hold scan, quick order, 10,000 nights", ["hold-scan.toml", "--quick", "--trials", "10000"], 25.0),
    ):
        file, *rest = arguments
        began = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "planner", "forecast", str(ROOT / "sequences" / file), "--json", *rest],
            cwd=ROOT,
            check=True,
            stdout=subprocess.DEVNULL,
        )
        taken = time.perf_counter() - began
        found.append(row(name, taken, "s", f"<= {most:g}", taken <= most))
    return found

"""Start-up: what a person waits for before the first word."""

import subprocess
import sys
import time
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent.parent


def best_of(count: int, args: list[str]) -> float:
    """Shortest wall time in seconds of `count` runs: the machine's other work only ever adds."""
    times = []
    for _ in range(count):
        began = time.perf_counter()
        subprocess.run([sys.executable, "-m", "planner", *args], cwd=ROOT, check=True, capture_output=True)
        times.append(time.perf_counter() - began)
    return min(times)


def bare() -> float:
    times = []
    for _ in range(7):
        began = time.perf_counter()
        subprocess.run([sys.executable, "-c", "pass"], check=True)
        times.append(time.perf_counter() - began)
    return min(times)


def rows() -> list[dict[str, Any]]:
    reference = bare() * 1000
    found = []
    for name, args, bound in [
        ("start-up of --help", ["--help"], 250.0),
        ("check of a normal file", ["check", "sequences/hold-scan.toml"], 600.0),
    ]:
        value = best_of(7, args) * 1000
        found.append(
            {
                "name": name,
                "value": value,
                "unit": "ms",
                "bound": f"<= {bound:g}",
                "reference": reference,
                "ratio": value / reference,
                "ok": value <= bound,
            }
        )
    return found

"""Compile at scale: a million shots in memory and on disk, a trillion refused, a night's limits walked."""

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent.parent

# each runs in a process of its own, so that its peak memory is its own; numbers come back as JSON
PROGRAM = """
import json, resource, sys, tempfile, time
from pathlib import Path
import numpy as np
from planner.errors import ProblemsFound
from planner.sequence.compiler import compile_sequence
from planner.sequence.limits import check_order_limits
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import read_rig

what = sys.argv[1]
text = Path("sequences/reference-night-a.toml").read_text(encoding="utf-8")
rig = read_rig("sequences/gallery-rig.toml")
changes = {
    "repeats": {"repeats = 22": "repeats = 10417"},
    "distinct": {"repeats = 22": "repeats = 1", "count = 12": "count = 125000"},
    "trillion": {"repeats = 22": "repeats = 1000000", "count = 12": "count = 125000"},
    "order": {"repeats = 22": "repeats = 2084"},
}[what]
for old, new in changes.items():
    text = text.replace(old, new)
said = {}
began = time.perf_counter()
try:
    compiled = compile_sequence(parse_sequence(text, "bench.toml"), rig)
except ProblemsFound as found:
    said["refused"] = found.problems[0].message
said["seconds"] = time.perf_counter() - began
said["memory_mb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
if what in ("repeats", "distinct"):
    from planner.cli.compile import write_shots
    said["shots"] = len(compiled.table)
    with tempfile.TemporaryDirectory() as folder:
        began = time.perf_counter()
        write_shots(compiled, folder + "/shots.parquet")
        said["write_seconds"] = time.perf_counter() - began
if what == "order":
    shot = np.random.default_rng(1).permutation(len(compiled.table))
    start = np.concatenate([[0.0], np.cumsum(compiled.table.duration_s[shot])[:-1]])
    began = time.perf_counter()
    check_order_limits(compiled, rig, start, shot)
    said["seconds"] = time.perf_counter() - began
print(json.dumps(said))
"""


def measure(what: str) -> dict[str, Any]:
    done = subprocess.run([sys.executable, "-c", PROGRAM, what], cwd=ROOT, check=True, capture_output=True, text=True)
    said: dict[str, Any] = json.loads(done.stdout)
    return said


def bounded(name: str, value: float, unit: str, bound: float) -> dict[str, Any]:
    return {
        "name": name,
        "value": value,
        "unit": unit,
        "bound": f"<= {bound:g}",
        "reference": None,
        "ratio": None,
        "ok": value <= bound,
    }


def rows() -> list[dict[str, Any]]:
    found = []
    for what, title in (("repeats", "48 timelines"), ("distinct", "500,000 timelines")):
        said = measure(what)
        title = f"compile {said['shots']:,} shots, {title}"
        found.append(bounded(title, said["seconds"], "s", 5.0))
        found.append(bounded(f"{title}: peak memory", said["memory_mb"], "MB", 1024.0))
        found.append(bounded(f"{title}: writing Parquet", said["write_seconds"], "s", 5.0))
    said = measure("trillion")
    refusal = bounded("a file that asks for 1e12 shots is refused", said["seconds"], "s", 1.0)
    found.append({**refusal, "ok": refusal["ok"] and "1,000,000,000,000 shots" in said.get("refused", "")})
    found.append(bounded("duty and load over an order of 200,064 shots", measure("order")["seconds"], "s", 5.0))
    return found

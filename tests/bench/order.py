"""Running orders: how well they resist drift, by the outside scorer, and how long they take."""

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

from tests.outside import score_order

ROOT = Path(__file__).resolve().parent.parent.parent
Row = dict[str, Any]

# a long night in a process of its own, so that its peak memory is its own; beside it the same packets shuffled
LONG_NIGHT = """
import json, resource, sys, time
import numpy as np
from planner.design.drift import drifts_of
from planner.design.ordering import judge, make_order
from planner.sequence.compiler import compile_sequence
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import read_rig

times = int(sys.argv[1])
text = open("sequences/reference-night-a.toml", encoding="utf-8").read()
# the declared walk keeps its rate: it grows as the square root of time, and reaches more in a longer night
text = text.replace("repeats = 22", f"repeats = {22 * times}").replace("hours  = 10", "")
sequence = parse_sequence(text, "sequences/bench.toml")
table = compile_sequence(sequence, read_rig("sequences/gallery-rig.toml")).table
began = time.perf_counter()
order = make_order(table, sequence, seed=1)
said = {"seconds": time.perf_counter() - began, "shots": len(table), "figures": dict(order.figures)}
said["memory_mb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
rng = np.random.default_rng(1)
packets = len(table) // 8
rows = (8 * rng.permutation(packets)[:, None] + rng.permuted(np.tile(np.arange(8), (packets, 1)), axis=1)).ravel()
mid = np.cumsum(table.duration_s[rows]) - table.duration_s[rows] / 2
drifts = drifts_of(sequence, table)
said["shuffled"] = judge(table, sequence, rows, mid, np.zeros(len(rows), dtype=np.int64), drifts).figures()
print(json.dumps(said))
"""


def row(
    name: str, value: float, unit: str, bound: float, reference: float | None = None, *, least: bool = False
) -> Row:
    return {
        "name": name,
        "value": float(value),
        "unit": unit,
        "bound": f"{'>=' if least else '<='} {bound:g}",
        "reference": reference,
        "ratio": None if not reference else value / reference,
        "ok": bool(value >= bound if least else value <= bound),
    }


def ordered(name: str, seed: int, folder: str) -> tuple[dict[str, Any], dict[str, Any], float]:
    """What the command says, what the scorer says of its CSV, and the command's wall time, start-up included."""
    out = f"{folder}/{name}-{seed}.csv"
    args = [
        sys.executable,
        "-m",
        "planner",
        "order",
        f"sequences/{name}.toml",
        "--seed",
        str(seed),
        "--out",
        out,
        "--json",
    ]
    began = time.perf_counter()
    done = subprocess.run(args, cwd=ROOT, check=True, capture_output=True, text=True)
    seconds = time.perf_counter() - began
    said: dict[str, Any] = json.loads(done.stdout)
    return said, score_order.score(out, worst=1000), seconds


def night_a(folder: str) -> list[Row]:
    found = []
    scores, shuffled, times = [], [], []
    for seed in range(1, 6):
        said, scored, seconds = ordered("reference-night-a", seed, folder)
        scores.append({**scored, "any_mean": scored["any_period"]["mean"], "any_peak": scored["any_period"]["peak"]})
        shuffled.append(
            {
                **said["shuffled"],
                "any_mean": said["shuffled"]["any_period_mean"],
                "any_peak": said["shuffled"]["any_period_peak"],
            }
        )
        times.append(seconds)
    for key, words, bound in (
        ("additive_mean", "additive mean", 0.02),
        ("additive_worst", "additive worst", 0.12),
        ("coupled_mean", "coupled mean", 0.02),
        ("coupled_worst", "coupled worst", 0.15),
        ("any_mean", "any-period mean", 0.30),
        ("any_peak", "any-period peak", 0.70),
    ):
        value = max(score[key] for score in scores)
        found.append(row(f"night A, worst of seeds 1-5: {words}", value, "", bound, shuffled[0][key]))
    found.append(row("night A: shots scored", min(score["shots"] for score in scores), "", 2112, least=True))
    found.append(row("night A: order, slowest of seeds 1-5, start-up included", max(times), "s", 10.0))
    return found


def night_b(folder: str) -> list[Row]:
    found = []
    wanted: dict[str, list[float]] = {"additive": [], "coupled": []}
    settling, hours, own = [], [], []
    for seed in range(1, 4):
        said, scored, _ = ordered("reference-night-b", seed, folder)
        for kind, values in wanted.items():
            mine = [value for name, value in scored[f"worst_{kind}"] if "collar*kick" in name]
            values.append(float(np.mean(mine)))
        settling.append(said["settling_fraction"])
        hours.append(said["hours"])
        own.append(float(np.mean([value for name, value in scored["worst_additive"] if " collar " in name])))
    found.append(row("night B, worst of seeds 1-3: wanted parity, additive mean", max(wanted["additive"]), "", 0.02))
    found.append(row("night B, worst of seeds 1-3: wanted parity, coupled mean", max(wanted["coupled"]), "", 0.05))
    found.append(row("night B: settling", 100 * max(settling), "% of the night", 6.0))
    found.append(row("night B: length", max(hours), "h", 10.0))
    shown = row(
        "night B: the slow switch's own effect, additive mean (shown, not bounded)", max(own), "", 0.0, least=True
    )
    return [*found, shown]


def redraws() -> list[Row]:
    from planner.design.ordering import make_order, redraw
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    sequence = read_sequence(str(ROOT / "sequences" / "reference-night-a.toml"))
    table = compile_sequence(sequence, rig_of(sequence)).table
    order = make_order(table, sequence, seed=1)
    began = time.perf_counter()
    signs = redraw(order, table, sequence, n=10_000, rng=np.random.default_rng(1))
    seconds = time.perf_counter() - began
    return [
        row("night A: 10,000 redraws from the restricted set, its making included", seconds, "s", 10.0),
        row("night A: distinct among them", len(np.unique(signs, axis=0)), "", 9990, least=True),
        row("night A: members of the restricted set, log2", order.notes["log2_members"], "", np.log2(1e5), least=True),
    ]


def long_nights() -> list[Row]:
    found = []
    for times, bound in ((10, 30.0), (100, 300.0)):
        done = subprocess.run(
            [sys.executable, "-c", LONG_NIGHT, str(times)], cwd=ROOT, check=True, capture_output=True, text=True
        )
        said = json.loads(done.stdout)
        title = f"{said['shots']:,} shots"
        found.append(row(f"order of {title}", said["seconds"], "s", bound))
        found.append(row(f"order of {title}: peak memory", said["memory_mb"], "MB", 2048))
        for key in (
            "additive_mean",
            "additive_worst",
            "coupled_mean",
            "coupled_worst",
            "any_period_mean",
            "any_period_peak",
        ):
            shuffled = said["shuffled"][key]
            found.append(
                row(
                    f"{title}: {key.replace('_', ' ')}, bound a third of packets shuffled",
                    said["figures"][key],
                    "",
                    round(shuffled / 3, 4),
                    shuffled,
                )
            )
    return found


def rows() -> list[Row]:
    with tempfile.TemporaryDirectory() as folder:
        found = [*night_a(folder), *night_b(folder)]
    return [*found, *redraws(), *long_nights()]

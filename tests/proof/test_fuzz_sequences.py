"""10,000 fuzzed sequence and rig files: no traceback, bounded memory, each within a second."""

import random
import resource
import time
from typing import Any

from planner.errors import ProblemsFound
from planner.sequence.compiler import compile_sequence
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import parse_rig
from tests.sequence.helpers import EXAMPLES, RIG_TEXT, SMALL, small_rig
from tests.sequence.mutations import mutated

FILES = 10_000
MEMORY_MB = 1024.0  # the same bound as that of a million good shots


def rows() -> list[dict[str, Any]]:
    sources = [SMALL, *(path.read_text(encoding="utf-8") for path in EXAMPLES)]
    gallery = parse_rig((EXAMPLES[0].parent / "gallery-rig.toml").read_text(encoding="utf-8"), "gallery-rig.toml")
    rigs = [small_rig(), *[gallery] * len(EXAMPLES)]
    tracebacks, plans, slowest = 0, 0, 0.0
    for seed in range(FILES):
        rng = random.Random(seed)
        which = rng.randrange(len(sources))
        began = time.process_time()
        try:
            if rng.random() < 0.1:
                parse_rig(mutated(RIG_TEXT, rng), "fuzz.toml")
            else:
                compile_sequence(parse_sequence(mutated(sources[which], rng), "fuzz.toml"), rigs[which])
            plans += 1
        except ProblemsFound:
            pass
        except Exception as wrong:  # noqa: BLE001 - any other exception is what this proof counts
            tracebacks += 1
            print(f"seed {seed}: {wrong!r}"[:300])  # noqa: T201 - the seed is what its finder needs
        slowest = max(slowest, time.process_time() - began)
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0
    return [
        row("fuzzed files with a traceback", float(tracebacks), "files", "== 0", tracebacks == 0, float(FILES)),
        row("fuzzed files that are still plans", float(plans), "files", ">= 100", plans >= 100, float(FILES)),
        row("slowest fuzzed file", slowest, "s", "<= 1", slowest <= 1.0, None),
        row("peak memory over fuzzed files", memory, "MB", f"<= {MEMORY_MB:g}", memory <= MEMORY_MB, None),
    ]


def row(name: str, value: float, unit: str, bound: str, ok: bool, reference: float | None) -> dict[str, Any]:
    ratio = None if reference is None else value / reference
    return {
        "name": name,
        "value": value,
        "unit": unit,
        "bound": bound,
        "reference": reference,
        "ratio": ratio,
        "ok": ok,
    }

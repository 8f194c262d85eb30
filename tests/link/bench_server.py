"""A bench rig as a program of its own, for tests that start, end and kill one: python -m tests.link.bench_server ..."""

import sys
import time
from pathlib import Path

from planner.errors import InputError
from planner.link.adapter import Result, Shot
from planner.link.clocks import RealClock, SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal
from planner.link.serve import serve
from tests.link.rigs import EVENING, BenchRig


def paced(shot: Shot) -> Result:
    """A shot that takes its time."""
    time.sleep(shot.duration_s)
    return Result(atoms_a=1.0, atoms_b=2.0)


def main(clock: str, journal: str, port: str, bind: str) -> int:
    """Serve until told to end; exit code 2 where the address cannot be used, as the command line does."""
    kept = Journal(Path(journal))
    rig = BenchRig(paced if clock == "real" else None)
    host = Host(rig, RealClock() if clock == "real" else SimulatedClock(kept.recovered.latest or EVENING), journal=kept)
    try:
        serve(
            host,
            rig,
            announce=lambda address: print(address, flush=True),  # noqa: T201 - its screen is the test's pipe
            bind=bind,
            port=int(port),
            until_stdin_closes=True,
        )
    except InputError as error:
        print(error, file=sys.stderr)  # noqa: T201 - as above
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))

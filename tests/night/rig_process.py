"""A bench rig as a process of its own, to be killed: `python -m tests.night.rig_process JOURNAL PORT`."""

import json
import sys
from pathlib import Path

from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal
from planner.link.serve import serve
from tests.link.rigs import EVENING, BenchRig


def main() -> None:
    """Serve until standard input closes; the first line says the address."""
    journal = Journal(Path(sys.argv[1]))
    rig = BenchRig()
    start = max(EVENING, journal.recovered.latest or EVENING)
    host = Host(rig, SimulatedClock(start), journal=journal)

    def announce(address: str) -> None:
        sys.stdout.write(json.dumps({"address": address}) + "\n")
        sys.stdout.flush()

    serve(
        host,
        rig,
        announce=announce,
        port=int(sys.argv[2]),
        until_stdin_closes=True,
    )


if __name__ == "__main__":
    main()

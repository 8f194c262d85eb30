"""kill -9 of program or rig at random moments of a short night, until the night is done; then the judge."""

import json
import os
import random
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path

import planner
from planner.logbook import open_logbook
from planner.night.running import now_us
from tests.night.judging import check_night
from tests.night.nights import small_night

SHOTS_PER_KILL = 40  # enough that the night is still under way when the last kill comes
LONGEST_S = 1.2  # between two kills; starting takes the program half of this
END_WITHIN_S = 240.0
HOME = Path(planner.__file__).resolve().parent.parent


class Rig:
    """The rig's process; it comes back at the same address with its journal."""

    def __init__(self, folder: Path) -> None:
        self.journal = folder / "rig.jsonl"
        self._port = 0
        self.start()

    def start(self) -> None:
        command = [sys.executable, "-m", "tests.night.rig_process", str(self.journal), str(self._port)]
        self._process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, cwd=HOME)
        assert self._process.stdout is not None
        self.address = json.loads(self._process.stdout.readline())["address"]
        self._port = int(self.address.rsplit(":", 1)[1])

    def kill(self) -> None:
        self._process.kill()
        self._process.wait()
        for pipe in (self._process.stdin, self._process.stdout):
            if pipe is not None:
                pipe.close()


def start_program(folder: Path, address: str) -> "subprocess.Popen[bytes]":
    """`nightfringe run`, going on with the open night."""
    command = [sys.executable, "-m", "planner", "run", "--logbook", str(folder / "night.sqlite"), "--rig", address]
    with (folder / "program.log").open("ab") as log:
        environment = {**os.environ, "PYTHONPATH": str(HOME), "OPENBLAS_NUM_THREADS": "1"}
        return subprocess.Popen(command, stdout=log, stderr=log, cwd=folder, env=environment)


def kill_through_a_night(folder: Path, *, kills: int, seed: int) -> Counter[str]:
    """Run one night through `kills` kills and judge it; returns its attempts by state, and kills that hit nothing."""
    chance = random.Random(seed)
    shots = SHOTS_PER_KILL * kills
    with open_logbook(str(folder / "night.sqlite"), create=True) as book:
        night = book.book_night(small_night(shots, length_s=1e7), now_us=now_us(), who="test")
    rig = Rig(folder)
    program = start_program(folder, rig.address)
    idle = 0
    try:
        for _ in range(kills):
            time.sleep(chance.uniform(0.0, LONGEST_S))
            idle += program.poll() is not None
            what = chance.choice(["program", "program", "rig", "both"])
            if what in ("program", "both"):
                program.kill()
                program.wait()
            if what in ("rig", "both"):
                rig.kill()
                rig.start()
            if program.poll() is not None:
                program = start_program(folder, rig.address)
        assert program.wait(END_WITHIN_S) == 0, (folder / "program.log").read_text()[-2000:]
    finally:
        program.kill()
        program.wait()
        rig.kill()
    with open_logbook(str(folder / "night.sqlite")) as book:
        assert book.night(night.id).state == "done"
        found = check_night(book, night.id, rig.journal, shots=shots)
    found["idle kills"] = idle
    return found

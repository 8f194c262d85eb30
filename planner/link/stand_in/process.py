"""Start the stand-in rig as a process of its own, from Python: for rehearsals, and for tests that kill it."""

import json
import os
import queue
import subprocess
import sys
import threading
from datetime import datetime
from pathlib import Path
from types import TracebackType
from typing import Literal, Self

import planner
from planner.errors import RigUnreachable
from planner.link.messages import format_time
from planner.link.wire import shorten

READY_WITHIN_S = 60.0  # a cold start imports numpy and a web server; on a busy small computer that takes seconds
END_WITHIN_S = 15.0


class StandInProcess:
    """A running stand-in rig: `url` to reach it, `journal` to judge it. Ends with the `with` block, or its parent."""

    def __init__(self, process: "subprocess.Popen[bytes]", url: str, journal: Path) -> None:
        self._process = process
        self.url = url
        self.journal = journal

    @property
    def pid(self) -> int:
        """The process id."""
        return self._process.pid

    @property
    def port(self) -> int:
        """The port; give it to the next start to come back at the same address."""
        return int(self.url.rsplit(":", 1)[1])

    def kill(self) -> None:
        """End it at once, as a power cut would (SIGKILL; TerminateProcess on Windows)."""
        self._process.kill()
        self._reap()

    def stop(self) -> int:
        """End it in good order; its exit code."""
        if self._process.stdin is not None:
            self._process.stdin.close()
        try:
            self._process.wait(END_WITHIN_S)
        except subprocess.TimeoutExpired:
            self._process.kill()
        return self._reap()

    def _reap(self) -> int:
        code = self._process.wait(END_WITHIN_S)
        for pipe in (self._process.stdin, self._process.stdout):
            if pipe is not None:
                pipe.close()
        return code

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()


def start_stand_in(
    profile: Path,
    *,
    journal: Path,
    clock: Literal["simulated", "real"] = "simulated",
    seed: int = 0,
    port: int = 0,
    start: datetime | None = None,
    token_file: Path | None = None,
) -> StandInProcess:
    """Start the stand-in rig with this interpreter and wait until it answers.

    Its messages go to this process's standard error. Raises RigUnreachable when it ends, or says nothing, instead.
    """
    command = [sys.executable, "-m", "planner", "rig", "stand-in", "--until-stdin-closes"]
    command += ["--profile", str(profile), "--journal", str(journal)]
    command += ["--clock", clock, "--seed", str(seed), "--port", str(port)]
    if start is not None:
        command += ["--start", format_time(start)]
    if token_file is not None:
        command += ["--token-file", str(token_file)]
    package_home = str(Path(planner.__file__).resolve().parent.parent)
    path = os.pathsep.join(part for part in (package_home, os.environ.get("PYTHONPATH")) if part)
    process = subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, env={**os.environ, "PYTHONPATH": path}
    )
    rig = StandInProcess(process, "", journal)
    line = _first_line(process)
    try:
        rig.url = str(json.loads(line)["address"])
    except (ValueError, KeyError, TypeError) as error:
        rig.kill()
        said = shorten(line.decode("utf-8", "replace")) or "nothing"
        raise RigUnreachable(f"the stand-in rig did not start (it said {said})") from error
    return rig


def _first_line(process: "subprocess.Popen[bytes]") -> bytes:
    """The first line of standard output, or nothing if it does not come in time (pipes cannot be polled everywhere)."""
    pipe = process.stdout
    if pipe is None:
        return b""
    lines: queue.SimpleQueue[bytes] = queue.SimpleQueue()
    threading.Thread(target=lambda: lines.put(pipe.readline()), name="first line", daemon=True).start()
    try:
        return lines.get(timeout=READY_WITHIN_S)
    except queue.Empty:
        return b""

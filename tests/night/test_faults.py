"""Nights through random faults and power cuts on both sides, judged by the rig's own journal.

A script of faults is drawn; at each call to the rig, and at each commit, the next item of the script says what goes
wrong. A crash of the program is an exception that nothing in it catches; the next dispatcher is a new program.
"""

from collections.abc import Iterator
from contextlib import contextmanager, suppress
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from planner.errors import LinkError, RigMalformed, RigNotNow, RigUnknown, RigUnreachable
from tests.night.conftest import NewBench
from tests.night.judging import check_night
from tests.night.nights import Bench

SHOTS = 6
MOST_PROGRAMS = 40
CALLS = ("describe", "now", "put", "ask", "since", "withdraw", "ack", "move_clock")
# calls to the rig between the sending of a shot and its arrival there
LATE = {"arrives soon": 4, "arrives late": 6, "arrives very late": 8}
FAULTS = (
    "fine",
    "crash before",
    "crash after",
    "no answer before",
    "no answer after",
    "unreachable",
    "nonsense",
    "not now",
    "rig restarts before",
    "rig restarts after",
    *LATE,
)


class Crash(BaseException):
    """The program is gone: nothing of it runs any more."""


class Faulty:
    """The rig of a bench behind a link on which things go wrong as the script says."""

    def __init__(self, bench: Bench, script: list[str]) -> None:
        self._bench = bench
        self._script = script
        self._on_its_way: list[tuple[int, Any]] = []  # calls left until it arrives, key and intent

    def __getattr__(self, name: str) -> Any:
        if name not in CALLS:
            raise AttributeError(name)

        def call(*args: Any) -> Any:
            fault = self._script.pop() if self._script else "fine"
            self._deliver()
            if fault in LATE and name == "put":
                self._on_its_way.append((LATE[fault], args))
                raise RigUnknown("no answer came")
            self._before(fault)
            answer = getattr(self._bench.host, name)(*args)
            self._after(fault)
            return answer

        return call

    def _deliver(self) -> None:
        """A request that was slow on the network comes in now, whatever the program has done since."""
        self._on_its_way = [(left - 1, args) for left, args in self._on_its_way]
        for left, args in self._on_its_way:
            if left == 0:
                with suppress(LinkError):
                    self._bench.host.put(*args)

    def _before(self, fault: str) -> None:
        if fault == "crash before":
            raise Crash
        if fault == "no answer before":
            raise RigUnknown("the request was lost on its way")
        if fault == "unreachable":
            raise RigUnreachable("nobody listens")
        if fault == "not now":
            raise RigNotNow("full", retry_after_s=1.0, full=True)
        if fault == "rig restarts before":
            self._restart()
            raise RigUnreachable("nobody listens")

    def _after(self, fault: str) -> None:
        if fault == "crash after":
            raise Crash
        if fault == "no answer after":
            raise RigUnknown("the answer was lost on its way")
        if fault == "nonsense":
            raise RigMalformed("nonsense", answer="<html>")
        if fault == "rig restarts after":
            self._restart()
            raise RigUnknown("the connection broke")

    def _restart(self) -> None:
        self._bench.host.close()
        self._bench.boot_rig()


def with_commits_that_fail(bench: Bench, script: list[str]) -> None:
    """Let the program die just before or just after a commit, as the script says."""
    whole = bench.book.writing

    @contextmanager
    def writing() -> Iterator[Any]:
        fault = script.pop() if script else "fine"
        with whole() as connection:
            yield connection
            if fault == "crash before":
                raise Crash
        if fault == "crash after":
            raise Crash

    bench.book.writing = writing  # type: ignore[method-assign]


def run_through(bench: Bench, calls: list[str], commits: list[str]) -> None:
    """Programs one after the other until the night is done."""
    with_commits_that_fail(bench, commits)
    for _ in range(MOST_PROGRAMS):
        try:
            assert bench.dispatcher(Faulty(bench, calls)).run() == "done"
            return
        except Crash:
            continue
    raise AssertionError(f"the night was not done after {MOST_PROGRAMS} programs; left: {calls} {commits}")


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    calls=st.lists(st.sampled_from(FAULTS), max_size=30),
    commits=st.lists(st.sampled_from(["fine", "fine", "crash before", "crash after"]), max_size=15),
)
def test_nothing_is_lost_or_done_twice(calls: list[str], commits: list[str], new_bench: NewBench) -> None:
    """Whatever goes wrong and whenever either side dies: one start a key, one end an attempt, no result missing."""
    bench = new_bench(shots=SHOTS, journal=True, length_s=36000.0)
    run_through(bench, calls, commits)
    check_night(bench.book, bench.night.id, bench.folder / "rig.jsonl", shots=SHOTS)
    bench.close()


@pytest.mark.parametrize("fault", FAULTS)
@pytest.mark.parametrize("when", [1, 3, 6])
def test_one_fault_at_a_time(fault: str, when: int, new_bench: NewBench) -> None:
    """Each kind of fault alone, early, in the middle and late: the night goes on by itself or at the next start."""
    bench = new_bench(shots=SHOTS, journal=True, length_s=36000.0)
    run_through(bench, [fault, *["fine"] * when], [])
    check_night(bench.book, bench.night.id, bench.folder / "rig.jsonl", shots=SHOTS)

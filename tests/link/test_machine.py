"""The host under any order of calls, crashes included: at most one start per key, exactly one end per attempt."""

import shutil
import tempfile
from collections import Counter
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

import pytest
from hypothesis import Phase, settings
from hypothesis import strategies as st
from hypothesis.stateful import Bundle, RuleBasedStateMachine, consumes, initialize, invariant, rule

from planner.errors import RigFenced, RigNotNow, RigRefused
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal, read_journal
from planner.link.messages import ENDED, Intent, ShotReport, new_key
from tests.link.rigs import EVENING, BenchRig, make_intent

SECONDS = st.integers(0, 40)
LIFE = {  # what may follow on what, as seen from outside within one boot
    "unknown": {"unknown", "waiting", "running", "done", "failed", "withdrawn"},
    "waiting": {"waiting", "running", "done", "failed", "withdrawn"},
    "running": {"running", "done", "failed"},
}


def answer_of(call: Callable[[], object]) -> str:
    """What a call came to: its result, or the status or name of its refusal."""
    try:
        return str(call())
    except RigFenced:
        return "fenced"
    except RigRefused as refused:
        return str(refused.status)
    except RigNotNow as busy:
        return "full" if busy.full else "not ready"


class RigMachine(RuleBasedStateMachine):
    """Programs of all kinds talk to one rig, which now and then loses its power."""

    sent = Bundle("sent")

    @initialize()
    def first_boot(self) -> None:
        self.folder = Path(tempfile.mkdtemp())
        self.path = self.folder / "rig.jsonl"
        self.rig = BenchRig()
        self.ends: dict[str, ShotReport] = {}  # as first told
        self.seen: dict[str, str] = {}  # key -> last state told in this boot
        self.acknowledged: set[str] = set()
        self.top_epoch = 0
        self.journal: Journal | None = None
        self.boot()

    def boot(self) -> None:
        if self.journal is not None:
            self.journal.close()
        self.journal = Journal(self.path)
        latest = self.journal.recovered.latest
        self.host = Host(self.rig, SimulatedClock(latest or EVENING), journal=self.journal)
        self.seen.clear()
        self.acknowledged.clear()

    def put(self, key: str, intent: Intent) -> None:
        boot = self.host.describe().description
        answer = answer_of(lambda: self.host.put(key, intent))
        expected = {"accepted", "known", "fenced", "full", "409", "410", "412"}
        if intent.epoch >= self.top_epoch + 1 or self.top_epoch == 0:
            expected.discard("fenced")
        if intent.description != boot:
            expected.discard("accepted")
        else:
            expected.discard("412")
        assert answer in expected
        self.top_epoch = max(self.top_epoch, intent.epoch)

    @rule(
        target=sent,
        lasts=st.integers(1, 30),
        wait=st.none() | SECONDS,
        start_within=st.none() | SECONDS,
        ahead=st.integers(0, 1),
    )
    def send_new(self, lasts: int, wait: int | None, start_within: int | None, ahead: int) -> tuple[str, Intent]:
        now = self.host.now().now
        not_before = None if wait is None else now + timedelta(seconds=wait)
        start_by = None if start_within is None else (not_before or now) + timedelta(seconds=start_within)
        epoch = self.top_epoch + ahead
        intent = make_intent(
            self.host.describe(),
            duration_s=float(lasts),
            not_before=not_before,
            start_by=start_by,
            epoch=epoch,
            driver=f"dispatcher-{epoch}",
        )
        key = new_key()
        self.put(key, intent)
        return key, intent

    @rule(attempt=sent)
    def send_again(self, attempt: tuple[str, Intent]) -> None:
        self.put(*attempt)

    @rule(attempt=sent, other=sent)
    def send_a_key_with_anothers_shot(self, attempt: tuple[str, Intent], other: tuple[str, Intent]) -> None:
        self.put(attempt[0], other[1])

    @rule(attempt=sent, wait_s=st.sampled_from([0.0, 25.0]))
    def ask(self, attempt: tuple[str, Intent], wait_s: float) -> None:
        report = self.host.ask(attempt[0], wait_s)
        if wait_s > 0 and report.state in ("waiting", "running"):
            raise AssertionError("a wait on a ready simulated rig comes to the shot's end")

    @rule(attempt=sent)
    def withdraw(self, attempt: tuple[str, Intent]) -> None:
        before = self.host.ask(attempt[0])
        answer = answer_of(lambda: self.host.withdraw(attempt[0]))
        over = before.state in ("running", "done", "failed") or attempt[0] in self.acknowledged
        assert answer == ("409" if over and before.state != "withdrawn" else "None")
        assert (self.host.ask(attempt[0]).state == "withdrawn") == (answer == "None")

    @rule(attempt=consumes(sent))
    def acknowledge_and_forget(self, attempt: tuple[str, Intent]) -> None:
        if self.host.ask(attempt[0]).ended:
            self.acknowledged.add(attempt[0])
        self.host.ack([attempt[0]])

    @rule(seconds=SECONDS)
    def let_time_pass(self, seconds: int) -> None:
        before = self.host.now()
        after = self.host.move_clock(before.now + timedelta(seconds=seconds))
        assert before.now <= after.now <= before.now + timedelta(seconds=seconds)
        passed_s = (after.now - before.now).total_seconds()
        # one microsecond is the link's resolution; the difference of two floats is good to much less
        assert after.uptime_s - before.uptime_s == pytest.approx(passed_s, rel=0, abs=1e-7)

    @rule()
    def power_cut(self) -> None:
        self.boot()

    @invariant()
    def no_key_was_played_twice(self) -> None:
        assert all(count == 1 for count in self.rig.played.values())

    @invariant()
    def records_only_move_forward_and_ends_never_change(self) -> None:
        shots = self.host.since(0).shots
        assert sum(not shot.ended for shot in shots) <= 2
        assert sum(shot.state == "running" for shot in shots) <= 1
        for shot in shots:
            assert shot.state in LIFE.get(self.seen.get(shot.key, "unknown"), {self.seen.get(shot.key)})
            self.seen[shot.key] = shot.state
            if shot.ended:
                assert self.ends.setdefault(shot.key, shot) == shot

    def teardown(self) -> None:
        """The journal is the judge over all boots."""
        if getattr(self, "journal", None) is None:
            return
        self.journal.close()
        facts = list(read_journal(self.path))
        shutil.rmtree(self.folder)
        starts = Counter(fact["key"] for fact in facts if fact["event"] == "start")
        accepts = [fact for fact in facts if fact["event"] == "accept"]
        ends = Counter(fact["key"] for fact in facts if fact["event"] == "end")
        assert starts == self.rig.played
        assert all(count == 1 for count in ends.values())
        assert [fact["ordinal"] for fact in accepts] == list(range(1, len(accepts) + 1))
        assert len({fact["key"] for fact in accepts}) == len(accepts)
        assert set(starts) <= {fact["key"] for fact in accepts}
        withdrawn: set[object] = set()
        for fact in facts:  # a rig that forgot a shot may be told to withdraw it; what was withdrawn never starts
            assert fact["event"] != "start" or fact["key"] not in withdrawn
            if fact["event"] == "withdraw":
                withdrawn.add(fact["key"])
        told = {key: report for key, report in self.ends.items() if report.state in ENDED - {"withdrawn"}}
        written = {fact["key"]: fact["report"] for fact in facts if fact["event"] == "end"}
        assert all(written[key] == report.document() for key, report in told.items())
        self.check_that_shots_never_overlap(facts)

    def check_that_shots_never_overlap(self, facts: list[dict[str, object]]) -> None:
        running: object = None
        for fact in facts:
            if fact["event"] == "boot":
                running = None  # what ran when the power went was lost
            elif fact["event"] == "start":
                assert running is None
                running = fact["key"]
            elif fact["event"] == "end" and fact["key"] == running:
                running = None


RigMachine.TestCase.settings = settings(
    max_examples=60, stateful_step_count=40, deadline=None, derandomize=True, phases=[Phase.generate, Phase.target]
)
TestRigMachine = RigMachine.TestCase

"""The rig's side of the link as a state machine, free of HTTP: it has the same calls as RigClient, and the same errors.

It keeps the link's two promises, at most one start per key and exactly one terminal record per attempt:

- a key is waiting, running or ended, once; it is remembered until the next boot, even after its result is forgotten;
- a withdrawn key, come or not, is never accepted again;
- the description's id covers the boot, so what was made for an earlier boot is refused by a later one that has
  forgotten the keys (412), however late it comes;
- every fact is in the journal, on disk, before the shot starts or the caller hears of it.

Shots run one at a time in the order accepted. On a simulated clock everything happens inside the calls; on a real one
the thread in player.py takes what is due.
"""

import hashlib
import threading
from collections import deque
from collections.abc import Callable, Iterable
from datetime import datetime, timedelta
from typing import Any, Literal

from planner.errors import RigFenced, RigNotNow, RigRefused
from planner.link.adapter import Adapter, Shot, ShotFailed
from planner.link.clocks import Clock, Instant, SimulatedClock
from planner.link.journal import Journal
from planner.link.messages import (
    Description,
    Intent,
    Known,
    Now,
    ShotReport,
    format_time,
)
from planner.link.records import Outcome, Record
from planner.link.wire import canonical

SLOTS = 2  # one running, one ready behind it: the rig never waits for the program
RETAINS_S = 86400.0
RETRY_NOT_READY_S = 5.0
RETRY_FULL_S = 1.0
TICK = timedelta(microseconds=1)  # the smallest step of time in the link's messages


class Host:
    """A rig: an adapter that plays shots, a clock, and what was asked of it.

    `journal` may be None for a rig that needs no judge. All methods may be called from any thread.
    """

    def __init__(
        self,
        adapter: Adapter,
        clock: Clock,
        *,
        journal: Journal | None = None,
        slots: int = SLOTS,
        retains_s: float = RETAINS_S,
    ) -> None:
        self.clock = clock
        self._adapter = adapter
        self._journal = journal
        self._lock = threading.RLock()
        self.changed = threading.Condition(self._lock)
        self._records: dict[str, Record] = {}  # by rising ordinal
        self._queue: deque[Record] = deque()
        self._running: Record | None = None
        self._tombstones: dict[str, Instant] = {}  # withdrawn keys, whether their shot ever came or not
        self._forgotten: dict[str, str] = {}  # acknowledged keys -> digest
        self._listeners: dict[object, Callable[[], None]] = {}
        self._broken: str | None = None  # why nothing starts any more, until the next boot
        self._closed = False
        self._description = _describe(adapter, clock, slots, retains_s)
        recovered = None if journal is None else journal.recovered
        self._last_ordinal = 0 if recovered is None else recovered.last_ordinal
        self._fence = (-1, "") if recovered is None else (recovered.epoch, recovered.driver)
        self._note("boot", rig=self._description.rig, description=self._description.description)
        if not self._flushed():
            raise RigNotNow(str(self._broken), retry_after_s=RETRY_NOT_READY_S)

    # ---- the calls of the link

    def describe(self) -> Description:
        """What the rig is and can do."""
        return self._description

    def now(self) -> Now:
        """Time and readiness."""
        with self._lock:
            instant = self.clock.instant()
            why = self._not_ready()
            return Now(now=instant.utc, uptime_s=instant.uptime_s, boot=self.clock.boot, ready=why is None, why=why)

    def put(self, key: str, intent: Intent) -> Literal["accepted", "known"]:
        """Take one attempt into the queue. Raises RigFenced, RigRefused (409, 410, 412, 422) or RigNotNow."""
        with self._lock:
            self._check_fence(intent)
            if key in self._tombstones:
                raise _refused(410, f"the key {key} was withdrawn")
            digest = self._digest(key)
            if digest == intent.digest:
                return "known"
            if digest is not None:
                raise _refused(409, f"the key {key} is known with another digest")
            if intent.description != self._description.description:
                raise _refused(412, f"made for description {intent.description}; this rig's is now another, ask for it")
            self._check_content(intent)
            if (why := self._not_ready()) is not None:
                raise RigNotNow(why, retry_after_s=RETRY_NOT_READY_S)
            if len(self._queue) + (self._running is not None) >= self._description.slots:
                raise RigNotNow(f"all {self._description.slots} slots are taken", retry_after_s=RETRY_FULL_S, full=True)
            self._accept(key, intent)
            self._run_due()
            return "accepted"

    def ask(self, key: str, wait_s: float = 0.0) -> ShotReport:
        """What is known of `key`. With a wait: a simulated clock moves to that shot's end, a real one is waited for."""
        with self._lock:
            record = self._records.get(key)
            if record is not None and wait_s > 0:
                if isinstance(self.clock, SimulatedClock):
                    self._advance(self.clock, lambda: record.finished is not None)
                else:
                    self.changed.wait_for(lambda: record.finished is not None or self._closed, timeout=wait_s)
            return self._report(key)

    def since(self, ordinal: int) -> Known:
        """All shots still known with a later ordinal."""
        with self._lock:
            later = [self._report(key) for key, record in self._records.items() if record.ordinal > ordinal]
            return Known(boot=self.clock.boot, shots=later)

    def withdraw(self, key: str) -> None:
        """Take a waiting shot back; an unknown key is remembered as withdrawn. Raises RigRefused (409)."""
        with self._lock:
            if key in self._tombstones:
                return
            record = self._records.get(key)
            if key in self._forgotten or (record is not None and record.state != "waiting"):
                state = "over" if record is None else record.state
                raise _refused(409, f"the shot {key} is {state} and cannot be withdrawn")
            instant = self.clock.instant()
            self._note("withdraw", key=key, ordinal=None if record is None else record.ordinal)
            if not self._flushed():
                raise RigNotNow(str(self._broken), retry_after_s=RETRY_NOT_READY_S)
            self._tombstones[key] = instant
            if record is not None:
                self._queue.remove(record)
                record.end("withdrawn", instant)
            self._tell()

    def ack(self, keys: Iterable[str]) -> None:
        """Forget results that are stored elsewhere; their keys stay known. Keys that have not ended are passed over."""
        with self._lock:
            for key in keys:
                record = self._records.get(key)
                if record is not None and record.finished is not None:
                    del self._records[key]
                    self._forgotten[key] = record.intent.digest

    def move_clock(self, until: datetime) -> Now:
        """Move a simulated clock to the earlier of `until` and the next event. Raises RigRefused (422)."""
        with self._lock:
            if not isinstance(self.clock, SimulatedClock):
                raise _refused(422, "this rig's clock is real and moves by itself")
            if until < self.clock.instant().utc:
                raise _refused(422, f"the clock stands at {format_time(self.clock.instant().utc)} and never runs back")
            event = self._next_event()
            self.clock.move_to(until if event is None else max(min(until, event), self.clock.instant().utc))
            self._run_due()
            return self.now()

    # ---- for the HTTP layer and the player

    def listen(self, listener: Callable[[], None]) -> Callable[[], None]:
        """Call `listener` after every end of a shot and on `close`; returns the function that stops it."""
        token = object()
        with self._lock:
            self._listeners[token] = listener

        def stop() -> None:
            with self._lock:
                self._listeners.pop(token, None)

        return stop

    def is_pending(self, key: str) -> bool:
        """Whether it makes sense to wait for the end of `key`."""
        with self._lock:
            record = self._records.get(key)
            return record is not None and record.finished is None and not self._closed

    def take_due(self) -> Shot | None:
        """Real clocks: mark the shot that is due as started, in the journal too, and hand it out to be played."""
        with self._lock:
            return self._turn(None)

    def seconds_to_event(self) -> float | None:
        """Real clocks: how long until something is due by the clock alone; None when nothing is."""
        with self._lock:
            event = self._next_event()
            return None if event is None else (event - self.clock.instant().utc) / timedelta(seconds=1)

    def finish(self, key: str, outcome: Outcome, *, more: bool = True) -> Shot | None:
        """Real clocks: the shot handed out is over; with `more`, hands out the next one if it is due."""
        with self._lock:
            record = self._records[key]
            record.outcome = outcome
            return self._turn(record, more=more)

    def close(self) -> None:
        """Wake everyone who waits and close the journal; what waits in the queue never runs."""
        with self._lock:
            self._broken, self._closed = "the rig's program is ending", True
            self._tell()
            if self._journal is not None:
                self._journal.close()
                self._journal = None

    # ---- rules

    def _not_ready(self) -> str | None:
        return self._broken or self._adapter.not_ready()

    def _digest(self, key: str) -> str | None:
        record = self._records.get(key)
        return self._forgotten.get(key) if record is None else record.intent.digest

    def _check_fence(self, intent: Intent) -> None:
        """One driver an epoch, and never back to an older one."""
        epoch, driver = self._fence
        if intent.epoch < epoch or (intent.epoch == epoch and intent.driver != driver):
            raise RigFenced(f"driver {driver} drives this rig since epoch {epoch}; epoch {intent.epoch} is over")
        self._fence = (intent.epoch, intent.driver)

    def _check_content(self, intent: Intent) -> None:
        for name, value in intent.settings.items():
            limits = self._description.settings.get(name)
            if limits is None:
                known = ", ".join(sorted(self._description.settings)) or "none"
                raise _refused(422, f"no setting {name} here; there are: {known}")
            if (limits.low is not None and value < limits.low) or (limits.high is not None and value > limits.high):
                raise _refused(422, f"{name} = {value:g} lies outside {limits.low} to {limits.high} {limits.unit}")
        for name, state in intent.switches.items():
            states = self._description.switches.get(name)
            if states is None:
                known = ", ".join(sorted(self._description.switches)) or "none"
                raise _refused(422, f"no switch {name} here; there are: {known}")
            if state not in states:
                raise _refused(422, f"switch {name} has the states {states[0]} and {states[1]}, not {state}")
        if (objection := self._adapter.objection(intent.settings, intent.switches)) is not None:
            raise _refused(422, objection)

    # ---- changes of state

    def _accept(self, key: str, intent: Intent) -> None:
        record = Record(key=key, intent=intent, ordinal=self._last_ordinal + 1)
        self._note(
            "accept",
            key=key,
            ordinal=record.ordinal,
            digest=intent.digest,
            driver=intent.driver,
            epoch=intent.epoch,
        )
        if not self._flushed():
            raise RigNotNow(str(self._broken), retry_after_s=RETRY_NOT_READY_S)
        self._last_ordinal = record.ordinal
        self._records[key] = record
        self._queue.append(record)
        self.changed.notify_all()

    def _start(self) -> Shot | None:
        """Start the shot at the head of the queue if it is due; None when none is."""
        if self._running is not None or not self._queue or self._not_ready() is not None:
            return None
        record, instant = self._queue[0], self.clock.instant()
        intent = record.intent
        if intent.not_before is not None and instant.utc < intent.not_before:
            return None
        self._note(
            "start",
            key=record.key,
            ordinal=record.ordinal,
            duration_s=intent.duration_s,
            settings=dict(intent.settings),
            switches=dict(intent.switches),
        )
        if not self._flushed():  # a start that no journal knows of must not happen
            return None
        self._queue.popleft()
        self._running = record
        record.state, record.started = "running", instant
        return Shot(
            key=record.key,
            ordinal=record.ordinal,
            settings=dict(intent.settings),
            switches=dict(intent.switches),
            settle_s=intent.settle_s,
            duration_s=intent.duration_s,
            timeline=intent.timeline,
            started=instant.utc,
        )

    def _turn(self, over: Record | None, *, more: bool = True) -> Shot | None:
        """End the shot that is over and those that are late, start the next one, then tell: in this order.

        All lines of a turn reach the disk together, before anyone is told. Where the disk refuses, nothing starts any
        more, but what was measured is still told.
        """
        ended = [] if over is None else [over]
        if over is not None:
            over.end_as_played(self.clock.instant())
            self._running = None
        ended += self._expire()
        for record in ended:
            self._note("end", key=record.key, ordinal=record.ordinal, report=record.report().document())
        shot = self._start() if more else None
        if ended:
            self._flushed()
            self._tell()
        return shot

    def _expire(self) -> list[Record]:
        """End waiting shots whose latest start has passed: they never fire."""
        instant = self.clock.instant()
        late = [record for record in self._queue if record.is_late(instant.utc)]
        for record in late:
            self._queue.remove(record)
            record.end("failed", instant, "too late: start_by passed before its turn came")
        return late

    # ---- simulated time

    def _next_event(self) -> datetime | None:
        """When something is due next by the clock alone: an end (simulated only), a start or an expiry."""
        times = [record.intent.start_by + TICK for record in self._queue if record.intent.start_by is not None]
        if self._running is not None:
            end = self._running.planned_end()
            if end is not None and isinstance(self.clock, SimulatedClock):
                times.append(end)
        elif self._queue and self._not_ready() is None:
            times.append(self._queue[0].intent.not_before or self.clock.instant().utc)
        return min(times, default=None)

    def _advance(self, clock: SimulatedClock, reached: Callable[[], bool]) -> None:
        """Let time pass from event to event until `reached`, or until nothing more can happen by itself."""
        while not reached() and (event := self._next_event()) is not None:
            clock.move_to(max(event, clock.instant().utc))
            self._run_due()

    def _run_due(self) -> None:
        """Simulated clocks: everything that is due at this very moment, ends before starts before expiries."""
        if not isinstance(self.clock, SimulatedClock):
            return
        running = self._running
        end = None if running is None else running.planned_end()
        is_over = end is not None and end <= self.clock.instant().utc
        if (shot := self._turn(running if is_over else None)) is not None:
            self._records[shot.key].outcome = play(self._adapter, shot)

    # ---- records

    def _report(self, key: str) -> ShotReport:
        record = self._records.get(key)
        if record is not None:
            return record.report()
        withdrawn = self._tombstones.get(key)
        if withdrawn is not None:
            return ShotReport(key=key, state="withdrawn", finished=withdrawn.utc, finished_uptime_s=withdrawn.uptime_s)
        why = "acknowledged earlier, and no longer kept" if key in self._forgotten else None
        return ShotReport(key=key, state="unknown", why=why)

    def _note(self, event: str, **facts: Any) -> None:
        if self._journal is not None:
            instant = self.clock.instant()
            self._journal.write(
                event,
                {"at": format_time(instant.utc), "uptime_s": instant.uptime_s, "boot": self.clock.boot, **facts},
            )

    def _flushed(self) -> bool:
        """Put the journal on disk; on failure the rig is no longer ready, and this is False."""
        if self._journal is None:
            return True
        if self._broken is not None:
            return False
        try:
            self._journal.flush()
        except OSError as error:
            self._broken = f"the rig's journal cannot be written ({error.strerror})"
            return False
        return True

    def _tell(self) -> None:
        self.changed.notify_all()
        for listener in list(self._listeners.values()):
            listener()


def play(adapter: Adapter, shot: Shot) -> Outcome:
    """Let the adapter play; whatever it raises ends this shot as failed and leaves the host running."""
    try:
        return adapter.play(shot)
    except ShotFailed as failed:
        return failed
    except Exception as error:  # noqa: BLE001 - an adapter is a lab's own code; its error belongs in the record
        return ShotFailed(f"the rig's adapter raised {type(error).__name__}: {error}")


def _refused(status: int, why: str) -> RigRefused:
    return RigRefused(why, status=status, why=why)


def _describe(adapter: Adapter, clock: Clock, slots: int, retains_s: float) -> Description:
    able = adapter.describe()
    unnamed = Description(
        link=1,
        rig=able.rig,
        boot=clock.boot,
        description="none yet",
        clock=clock.kind,
        settings=dict(able.settings),
        switches=dict(able.switches),
        readings=dict(able.readings),
        slots=slots,
        retains_s=retains_s,
    )
    digest = hashlib.sha256(canonical(unnamed.document())).hexdigest()
    return unnamed.model_copy(update={"description": digest[:32]})

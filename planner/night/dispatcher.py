"""The dispatcher: sends the shots of a night to the rig in order, and stores what comes back.

One transaction a shot: it stores the result of the shot that ended and the key of the one to be sent next. A key is on
disk before it is sent, a result before the rig is told that it may forget it. The rig holds the next shot already while
one runs (as many as it has slots), so that it never waits for this program.

Whatever happens to either side, nothing is assumed about a shot that was sent: the rig is asked (fates.py).
"""

import contextlib
from collections import deque
from collections.abc import Callable

from planner.errors import (
    LinkError,
    NightfringeError,
    RigMalformed,
    RigNotNow,
    RigRefused,
    RigUnknown,
    RigUnreachable,
)
from planner.link.client import RigClient
from planner.link.messages import Description, ShotReport
from planner.logbook import states
from planner.logbook.book import Logbook, NightRow
from planner.logbook.driving import Driving, NewAttempt, OpenAttempt, Step
from planner.night.contact import FIRST_WAIT_S, Contact, Hands, StopAsked
from planner.night.dwells import Dwells
from planner.night.fates import CONFIRMED, Fate, fate_of, withdraw
from planner.night.held import Held, Progress
from planner.night.reconciling import ask_about, deal_with_strangers
from planner.night.replacements import append_missed
from planner.night.reports import fraction_of, outcome_of
from planner.night.shots import ShotMaker, to_us
from planner.night.taking_over import TakingOver

LEASE_US = 60_000_000
ASK_WAIT_S = 2.0  # how long the rig may think about an answer: also how soon a request to stop is noticed
ACK_EVERY = 16  # results that may wait to be acknowledged together
GRACE_S = 600.0  # a shot that could not start so long after its time must not start any more
SECOND_US = 1_000_000


class Dispatcher:
    """Runs one night at one rig. `progress` is called after every shot; `replans`: a night that slips is replanned."""

    def __init__(
        self,
        book: Logbook,
        night: NightRow,
        client: RigClient,
        hands: Hands,
        *,
        owner: str,
        progress: Callable[[Progress], None] = lambda _: None,
        replans: bool = False,
    ) -> None:
        self._book = book
        self._night = night
        self._hands = hands
        self._owner = owner
        self._progress = progress
        self._contact = Contact(client, hands, self._quarantine)
        self._client = client
        self._driving: Driving
        self._maker: ShotMaker
        self._description: Description
        self._described = ""
        self._dwells: Dwells
        self._taking_over = TakingOver(book, night) if replans else None
        self._boot = ""
        self._held: deque[Held] = deque()
        self._seen_running: set[str] = set()
        self._to_acknowledge: list[str] = []
        self._next = night.next_position
        self._begins_us = night.begins_us
        self._free_us = 0  # when the rig will have played what ended last; its clock
        self._unsure = True  # nobody knows how the rig's switches stand
        self._ended = ""
        self._fraction: float | None = None

    def run(self) -> str:
        """Run the night until it is done, over or stopped; returns that state.

        Raises:
            RigRefused, RigFenced: the rig will not; the night is stopped, and its row says why.
            LogbookError: the logbook cannot be written; the rig keeps its results until the next run.
            InputError: the rig cannot do what the plan needs.
        """
        self._driving = self._book.drive(
            self._night.rig_id, owner=self._owner, now_us=self._hands.utc_us(), lease_us=LEASE_US
        )
        state, why = states.NIGHT_STOPPED, None
        try:
            self._take_up()
            state, why = self._loop()
        except StopAsked:
            why = "stopped while the rig could not be reached"
        except NightfringeError as error:
            why = str(error)
            with contextlib.suppress(NightfringeError):  # the first error is the one to tell
                self._close(state, why)
            raise
        self._close(state, why)
        return state

    def _close(self, state: str, why: str | None) -> None:
        if self._taking_over is not None:
            self._taking_over.close()
        with self._step() as step:
            step.set_state(state, why)
            step.audit(f"night_{state}", {"why": why, "next_position": self._next})
        self._driving.release()

    def _step(self) -> contextlib.AbstractContextManager[Step]:
        return self._driving.step(self._night.id, now_us=self._hands.utc_us())

    # ---- taking up

    def _take_up(self) -> None:
        """Meet the rig, load the plan, ask what became of what is open."""
        self._contact.say("asking the rig what it is")
        self._describe()
        with self._step() as step:
            step.set_state(states.NIGHT_RUNNING)
            step.audit(
                "rig_met",
                {
                    "rig": self._description.rig,
                    "boot": self._boot,
                    "description": self._description.description,
                    "epoch": self._driving.epoch,
                    "readings": self._description.readings,
                },
            )
        self._reconcile()

    def _describe(self) -> None:
        """Read the rig's description and time; check the plan against it, and anchor its clock."""
        while True:
            description = self._contact.patiently(self._client.describe)
            now = self._contact.patiently(self._client.now)
            if now.boot == description.boot:
                break
        self._contact.simulated = description.clock == "simulated"
        self._unsure = self._unsure or self._boot != now.boot
        self._description, self._boot = description, now.boot
        if self._described != description.description:
            self._load()
            self._described = description.description
        self._free_us = to_us(now.now)
        with self._step() as step:
            if self._begins_us is None:
                self._begins_us = self._free_us
                step.begin(begins_us=self._begins_us, clock=description.clock)
            step.anchor(boot=now.boot, utc_us=to_us(now.now), uptime_s=now.uptime_s)

    def _load(self) -> None:
        self._maker = ShotMaker(self._book.night_plan(self._night.id), self._description, self._driving.document)
        self._dwells = Dwells(self._maker, self._driving, self._night.id)

    # ---- the loop

    def _loop(self) -> tuple[str, str | None]:
        """Until nothing is left to do; returns the night's state, and why."""
        while True:
            if self._hands.stopping():
                self._finish_what_runs()
                return states.NIGHT_STOPPED, "stopped by hand"
            self._look_for_slip()
            self._top_up()
            if self._held:
                self._look_at_head()
                continue
            self._acknowledge()
            if self._next >= len(self._maker):
                if not self._replace_missed():
                    return states.NIGHT_DONE, None
            elif not self._fits_the_night():
                return states.NIGHT_OVER, "the night's window has ended"

    def _top_up(self) -> None:
        """Give the rig shots up to its slots."""
        while True:
            if self._held and not self._held[-1].confirmed and not self._send(self._held[-1]):
                return
            if not self._may_send():
                return
            with self._step() as step:
                self._intend(step)

    def _may_send(self) -> bool:
        """Whether there is a next shot, a slot for it, and time in the night's window."""
        if self._hands.stopping() or self._next >= len(self._maker) or len(self._held) >= self._description.slots:
            return False
        if self._taking_over is not None and self._taking_over.due(self._next):
            return False
        return self._fits_the_night()

    def _fits_the_night(self) -> bool:
        """Whether the next shot would end within the night's window."""
        settle_s = self._maker.settle_s(self._next, unsure=self._unsure)
        return self._start_us() + _us(self._maker.length_s(self._next, settle_s)) <= self._window_end_us()

    def _start_us(self) -> int:
        """When the rig will be free for another shot, by its own clock."""
        return self._free_us + _us(sum(held.length_s for held in self._held))

    def _window_end_us(self) -> int:
        return (self._begins_us or self._free_us) + _us(self._night.length_s)

    def _intend(self, step: Step) -> None:
        """Commit the key of the next shot, to be sent once the transaction is on disk."""
        position, maker = self._next, self._maker
        settle_s = maker.settle_s(position, unsure=self._unsure)
        length_s = maker.length_s(position, settle_s)
        start_us = self._start_us()
        not_before_us = self._dwells.not_before_us(position)
        latest_us = min(start_us + _us(GRACE_S), self._window_end_us() - _us(length_s))
        intent = maker.intent(
            position,
            driver=self._owner,
            epoch=self._driving.epoch,
            settle_s=settle_s,
            not_before_us=not_before_us,
            start_by_us=max(latest_us, not_before_us or start_us),
        )
        attempt = step.intend(
            NewAttempt(
                key=self._hands.new_key(),
                request_id=maker.request(position).id,
                revision=maker.revision(position),
                position=position,
                digest=intent.digest,
                boot=self._boot,
                settle_s=settle_s,
                start_by_us=None if intent.start_by is None else to_us(intent.start_by),
            )
        )
        step.go_on_from(position + 1)
        self._next, self._unsure = position + 1, False
        self._held.append(Held(attempt=attempt, intent=intent, length_s=length_s, confirmed=False, noted=False))

    def _send(self, held: Held) -> bool:
        """Send an attempt whose key is on disk; True when the rig has it."""
        if held.intent is None:
            return True
        try:
            self._client.put(held.attempt.key, held.intent)
        except RigNotNow as busy:
            self._contact.say(f"waiting: {busy}")
            if len(self._held) == 1:
                self._contact.pass_time(busy.retry_after_s)
                self._give_up_if_late(held)
            return False
        except (RigUnreachable, RigUnknown, RigMalformed) as error:
            self._meet_again(error, held.attempt.key)
            return False
        except RigRefused as refused:
            if refused.status == 409:
                raise  # a random key that means something else there: nothing that asking could clear up
            self._take_back(held, f"refused by the rig: {refused.why}")
            if refused.status == 412:  # it has changed since it described itself; nothing was accepted
                self._describe()
            elif refused.status != 410:
                raise
            return False
        held.confirmed = True
        return True

    def _give_up_if_late(self, held: Held) -> None:
        """A shot that waited for the rig beyond its latest start goes back, and comes again with a new one."""
        now = self._contact.patiently(self._client.now)
        self._free_us = max(self._free_us, to_us(now.now))
        if held.intent is not None and held.intent.start_by is not None and now.now > held.intent.start_by:
            self._take_back(held, "the rig was not ready until after its latest start")

    def _take_back(self, held: Held, why: str) -> None:
        """End an attempt that the rig has not accepted: leave word there, and send its position anew."""
        with contextlib.suppress(RigRefused):
            self._contact.patiently(lambda: self._client.withdraw(held.attempt.key), key=held.attempt.key)
        self._held.remove(held)
        with self._step() as step:
            step.end(held.attempt.id, states.WITHDRAWN, why=why)
            self._back_to(held.attempt.position, step)

    def _back_to(self, position: int, step: Step) -> None:
        """Let the order go on from a position that was taken back, if it was the last one sent."""
        if position == self._next - 1:
            self._next = position
            self._unsure = True
            self._dwells.forget()
            step.go_on_from(position)

    def _look_at_head(self) -> None:
        """Ask about the shot that ends next; store its end, with the next intent, if it has one."""
        head = self._held[0]
        if not head.confirmed:
            return  # it is still to be sent
        key = head.attempt.key
        try:
            report = self._client.ask(key, ASK_WAIT_S)
        except RigNotNow as busy:
            self._contact.say(f"waiting: {busy}")
            self._contact.pass_time(busy.retry_after_s)
            return
        except (RigUnreachable, RigUnknown, RigMalformed) as error:
            self._meet_again(error, key)
            return
        if report.state == "unknown":  # it may have restarted: what else it held is in question too
            self._ask_anew()
            return
        if report.state == "running":
            self._seen_running.add(key)
            self._contact.say("a shot runs")
        fate = self._fate(head.attempt, report, confirmed=True)
        if fate is not None:
            self._record(head, fate)
        elif self._contact.simulated:
            self._wait_for_rig()

    def _wait_for_rig(self) -> None:
        """A simulated rig that ended nothing is waiting for something: let time pass."""
        now = self._contact.patiently(self._client.now)
        self._contact.say(
            "the rig runs" if now.ready else f"waiting: the rig is not ready: {now.why or 'no reason given'}"
        )
        self._contact.pass_time(1.0)

    def _record(self, head: Held, fate: Fate) -> None:
        """The one transaction: this end, and the next shot's key."""
        self._held.remove(head)
        self._note_end(fate.report)
        with self._step() as step:
            for held in self._held:
                if held.confirmed and not held.noted:
                    step.change(held.attempt.id, states.ACCEPTED)
                    held.noted = True
            self._write_end(step, head.attempt, fate)
            if self._may_send() and all(held.confirmed for held in self._held):
                self._intend(step)
        self._told(head.attempt, fate)
        if len(self._to_acknowledge) >= ACK_EVERY:
            self._top_up()  # the rig's next shot comes before its housekeeping
            self._acknowledge()

    def _note_end(self, report: ShotReport | None) -> None:
        if report is not None and report.finished is not None:
            self._free_us = to_us(report.finished)
        if report is not None and report.started is not None:
            self._fraction = fraction_of(report)

    def _write_end(self, step: Step, attempt: OpenAttempt, fate: Fate) -> None:
        report = fate.report
        step.end(
            attempt.id,
            fate.state,
            ordinal=None if report is None else report.ordinal,
            why=fate.why,
            outcome=None if report is None else outcome_of(report),
        )
        if fate.report is not None and fate.report.started is not None:
            self._dwells.started(attempt.position, to_us(fate.report.started))

    def _told(self, attempt: OpenAttempt, fate: Fate) -> None:
        """After the commit: the rig may forget it, and whoever watches hears of it."""
        self._seen_running.discard(attempt.key)
        if fate.report is not None:
            self._to_acknowledge.append(attempt.key)
        self._ended = fate.state
        self._progress(
            Progress(
                sent=self._next - len(self._held),
                total=len(self._maker),
                left_s=self._maker.remaining_s(self._next) + sum(held.length_s for held in self._held),
                rig_time_us=self._free_us,
                fraction=self._fraction,
                ended=self._ended,
            )
        )

    def _acknowledge(self) -> None:
        """Tell the rig what is stored; if it cannot be told now, it is told later."""
        if self._to_acknowledge:
            try:
                self._client.ack(self._to_acknowledge)
            except (RigUnreachable, RigUnknown, RigNotNow, RigMalformed):
                return
            self._to_acknowledge.clear()

    # ---- after a break

    def _meet_again(self, error: LinkError, key: str) -> None:
        """No clear answer: meet the rig anew, and ask what became of everything that was sent."""
        self._contact.say(f"waiting: {error}")
        if isinstance(error, RigMalformed):
            self._contact.put_aside(error, key)
            self._contact.rest(FIRST_WAIT_S)
        self._ask_anew()

    def _ask_anew(self) -> None:
        self._describe()
        self._reconcile()

    def _reconcile(self) -> None:
        """Ask the rig about every attempt without an end, and write what is known."""
        attempts = self._driving.open_attempts(self._night.id)
        confirmed = {held.attempt.key for held in self._held if held.confirmed}
        confirmed |= {attempt.key for attempt in attempts if attempt.state in CONFIRMED}
        found = ask_about(
            attempts,
            self._contact,
            after=self._driving.last_ordinal(self._night.id),
            judge=lambda attempt, report: self._fate(attempt, report, confirmed=attempt.key in confirmed),
        )
        self._held = deque(self._held_again(attempt) for attempt in found.held)
        for _, fate in found.fates:
            self._note_end(fate.report)
        with self._step() as step:
            for attempt, fate in reversed(found.fates):
                self._write_end(step, attempt, fate)
                if fate.state == states.WITHDRAWN:
                    self._back_to(attempt.position, step)
        for attempt, fate in found.fates:
            self._told(attempt, fate)
        self._to_acknowledge += deal_with_strangers(found.strangers, self._driving, self._contact, self._step)

    def _held_again(self, attempt: OpenAttempt) -> Held:
        length_s = self._maker.length_s(attempt.position, attempt.settle_s)
        noted = attempt.state in CONFIRMED
        return Held(attempt=attempt, intent=None, length_s=length_s, confirmed=True, noted=noted)

    def _fate(self, attempt: OpenAttempt, report: ShotReport, *, confirmed: bool) -> Fate | None:
        age_us = self._hands.utc_us() - attempt.intended_us
        return fate_of(
            attempt,
            report,
            self._contact,
            seen_running=self._seen_running,
            confirmed=confirmed,
            too_old=age_us > _us(self._description.retains_s),
        )

    def _quarantine(self, error: RigMalformed, key: str | None) -> None:
        with self._step() as step:
            step.quarantine(key=key, why=str(error), answer=error.answer)

    # ---- endings

    def _finish_what_runs(self) -> None:
        """Take back what waits, last first, so that nothing starts meanwhile; then see the running shot through."""
        for held in reversed(list(self._held)):
            if withdraw(self._contact, held.attempt.key):
                self._held.remove(held)
                with self._step() as step:
                    step.end(held.attempt.id, states.WITHDRAWN, why="taken back: stopped by hand")
                    self._back_to(held.attempt.position, step)
        while self._held:
            self._contact.say("finishing the shot that runs")
            head = self._held[0]
            head.confirmed = True
            self._look_at_head()
        self._acknowledge()

    def _look_for_slip(self) -> None:
        """A night that has slipped is replanned (taking_over.py)."""
        if self._taking_over is None or self._next >= len(self._maker):
            return
        start_s = (self._start_us() - (self._begins_us or self._free_us)) / SECOND_US
        if self._taking_over.attend(
            self._maker, self._next, start_s=start_s, driving=self._driving, step=self._step, contact=self._contact
        ):
            self._load()

    def _replace_missed(self) -> int:
        """Append the missed shots that still fit the night as a new revision; how many."""
        room_s = (self._window_end_us() - self._free_us) / SECOND_US
        added = append_missed(self._book, self._driving, self._step, self._night.id, room_s=room_s)
        if added:
            self._load()
        return added


def _us(seconds: float) -> int:
    return round(seconds * SECOND_US)

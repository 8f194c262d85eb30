"""Replanning while a night runs: when the night has slipped, the rest is ordered anew, and taken over between packets.

The order is worked out in another process, at low priority, and dispatching does not wait for it: the old order goes on
to a packet boundary some minutes ahead, and what it runs until then counts as run. If the new order is not there by
then, the next boundary is tried. Only on a simulated clock, where no time is lost by it, is it waited for.

Slipped means: what is left no longer fits into the night's window, or the night has lost so much time since the order
was made that the shots to come are no longer where they were to balance those before.
"""

import os
from collections.abc import Callable
from concurrent.futures import Future, ProcessPoolExecutor
from contextlib import AbstractContextManager
from multiprocessing import get_context
from typing import TYPE_CHECKING

from planner.errors import NightfringeError
from planner.logbook.book import Logbook, NightRow
from planner.logbook.driving import Driving, Step
from planner.night.contact import Contact
from planner.night.shots import ShotMaker

if TYPE_CHECKING:  # ordering is loaded when a night slips, not whenever one starts
    from planner.design.replan import Replanned

SLIP_S = 900.0  # lost since the last look at the order that makes it worth a new one
LATE_S = 120.0  # by which the rest must overrun the window before it is cut
AHEAD_S = 180.0  # from now to the boundary where the new order is to take over
NICE = 10


class TakingOver:
    """Decides when a running night is replanned, and has it done; one for each night that runs."""

    def __init__(self, book: Logbook, night: NightRow) -> None:
        self._book, self._night = book, night
        self._workers: ProcessPoolExecutor | None = None
        self._waiting: tuple[int, Future[Replanned]] | None = None
        self._seen_slip_s = 0.0  # at this slip the order was made, or looked at in vain
        self._ahead_s = AHEAD_S

    def due(self, position: int) -> bool:
        """Whether a new order was to take over here: nothing is sent before that is settled."""
        return self._waiting is not None and position >= self._waiting[0]

    def attend(
        self,
        maker: ShotMaker,
        position: int,
        *,
        start_s: float,
        driving: Driving,
        step: Callable[[], AbstractContextManager[Step]],
        contact: Contact,
    ) -> bool:
        """Store a new order that is due, or have one made if the night has slipped; whether the order has changed.

        Args:
            position: the next to be sent. start_s: when it would begin, s from the night's start.
        """
        wait = contact.simulated
        if not self.due(position):
            said = self._look(maker, position, driving, start_s=start_s, wait=wait)
            if said is not None:
                contact.say(said)
            return False
        found = self._take(wait=wait)
        with step() as writing:
            if isinstance(found, str):
                writing.audit("not_replanned", {"why": found, "position": position})
            else:
                writing.revise(found.tail, from_position=position, why=found.why)
        contact.say(found if isinstance(found, str) else "the rest of the night is ordered anew")
        return not isinstance(found, str)

    def _look(self, maker: ShotMaker, position: int, driving: Driving, *, start_s: float, wait: bool) -> str | None:
        """If the night has slipped, have the rest ordered anew, in the background; says so in words.

        wait: time stands still meanwhile, so that it can take over at once.
        """
        if self._waiting is not None:
            return None
        slip_s = start_s - maker.planned_s(position)
        lost_s = slip_s - self._seen_slip_s
        late_s = start_s + maker.remaining_s(position) - self._night.length_s
        if lost_s < SLIP_S and not (late_s > LATE_S and lost_s > LATE_S):
            return None
        boundary = self._boundary(maker, position, 0.0 if wait else self._ahead_s)
        if boundary is None:
            return None
        self._seen_slip_s = slip_s
        from planner.night.replanning import how_it_stands, plan_the_rest

        standing = how_it_stands(
            self._book,
            driving,
            self._night,
            from_position=boundary,
            now_s=maker.planned_s(boundary) + slip_s,
            until_s=self._night.length_s,
        )
        if self._workers is None:
            self._workers = ProcessPoolExecutor(1, mp_context=get_context("spawn"), initializer=_niced)
        self._waiting = boundary, self._workers.submit(plan_the_rest, standing)
        return f"the night has slipped by {slip_s / 60:.0f} min: the rest is being ordered anew"

    def _take(self, *, wait: bool) -> "Replanned | str":
        """Where one is due: the new order, or in words why there is none. wait: until it is there."""
        if self._waiting is None:
            return "nothing was asked for"
        _, future = self._waiting
        self._waiting = None
        if not wait and not future.done():
            future.cancel()
            self._ahead_s *= 2  # a long night takes longer to order: try again further ahead
            self._seen_slip_s -= SLIP_S
            return "the new order was not ready in time; the old one goes on for now"
        try:
            found = future.result()
        except NightfringeError as error:
            return f"not replanned: {error}"
        self._seen_slip_s = 0.0
        return found

    def close(self) -> None:
        """End the other process."""
        if self._workers is not None:
            self._workers.shutdown(wait=False, cancel_futures=True)

    @staticmethod
    def _boundary(maker: ShotMaker, position: int, ahead_s: float) -> int | None:
        for later in range(position, len(maker)):
            far = maker.planned_s(later) - maker.planned_s(position) >= ahead_s
            if far and maker.opens_packet(later):
                return later
        return None


def _niced() -> None:
    """In the other process: dispatching comes first, and one core is enough."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ[name] = "1"
    if hasattr(os, "nice"):
        os.nice(NICE)

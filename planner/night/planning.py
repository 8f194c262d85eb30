"""Booking a night: from sequence files to a stored order within the rig's limits."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from planner.arrays import FloatArray
from planner.design.running_order import RunningOrder
from planner.errors import InputError, PlanImpossible
from planner.logbook.book import Logbook, NightRow
from planner.logbook.booking import NewNight, NewRequest
from planner.sequence.compiler import Compiled, compile_sequence
from planner.sequence.limits import check_night_limits
from planner.sequence.model import Rig
from planner.sequence.model import Sequence as SequenceFile
from planner.sequence.reader import MOST_SHOTS, read_sequence
from planner.sequence.rigfile import read_rig, rig_path

if TYPE_CHECKING:
    from planner.design.merging import Part
    from planner.design.ordering import Effort

ROOM = 1.1  # a window is so much longer than its order: settle waits after a break, repeats of missed shots
SHORT_ROOM_S = 600.0


@dataclass(frozen=True, kw_only=True)
class Booked:
    """A night that has just been booked. `approval` is the reference in the rig file, where there is one."""

    night: NightRow
    order_s: float
    notes: tuple[str, ...]
    approval: str | None


@dataclass(frozen=True, kw_only=True)
class Planned:
    """A night that could be booked: its requests, in order, and the order of its shots.

    compiled: of each request; parts: what of it runs.
    """

    rig: Rig
    compiled: tuple[Compiled, ...]
    parts: "tuple[Part, ...]"
    order: RunningOrder

    @property
    def notes(self) -> tuple[str, ...]:
        """Sentences for people, each named after its request where there are several."""
        several = len(self.parts) > 1
        return tuple(
            f"{part.sequence.title}: {note}" if several else note
            for part, compiled in zip(self.parts, self.compiled, strict=True)
            for note in compiled.notes
        )


def plan_night(
    files: Sequence[str | Path],
    *,
    seed: int,
    shares: Sequence[float] = (),
    hours: float | None = None,
    effort: "Effort" = "full",
    progress: Callable[[str, float], None] | None = None,
) -> Planned:
    """Read, compile, share out, order and check a night of one or several sequences.

    Args:
        shares: of the night's hours, one for each file; without them each sequence runs as often as it says.

    Raises:
        ProblemsFound: a sequence or rig file has problems, or the order is beyond the rig's limits.
        PlanImpossible: what is asked for does not fit.
        InputError: shares without hours or that contradict each other, files of different rigs, or sequences that
            contradict each other.
    """
    from planner.design.merging import Part, check_together, order_night
    from planner.design.sharing import check_shares, share_night

    sequences = [read_sequence(file) for file in files]
    rigs = [read_rig(rig_path(str(file), sequence.rig)) for file, sequence in zip(files, sequences, strict=True)]
    for file, rig in zip(files, rigs, strict=True):
        if rig.text != rigs[0].text:
            raise InputError(
                f"{file} is for the rig file {rig.file}, {files[0]} for {rigs[0].file}: one night, one rig"
            )
    titles = [sequence.title for sequence in sequences]
    if len(set(titles)) < len(titles):
        raise InputError("two sequences of one night have one title: give each its own, to tell their results apart")
    check_together(sequences)
    if shares:
        check_shares(shares, len(files))
        if hours is None:
            raise InputError("shares are of the night: say how long it is with --hours")
        sequences = [_filling(one, rig, share * hours) for one, rig, share in zip(sequences, rigs, shares, strict=True)]
    compiled = [compile_sequence(sequence, rig) for sequence, rig in zip(sequences, rigs, strict=True)]
    parts = [Part(table=one.with_checks, sequence=own) for one, own in zip(compiled, sequences, strict=True)]
    if shares and hours is not None:
        parts, order = share_night(parts, shares, hours=hours, seed=seed, effort=effort, progress=progress)
    else:
        order = order_night(parts, seed=seed, effort=effort, progress=progress)
    check_night_limits(
        [(part.table, one.timelines) for part, one in zip(parts, compiled, strict=True)],
        rigs[0],
        order.request,
        order.start_s,
        order.shot,
        settle_s=order.settle_s,
    )
    return Planned(rig=rigs[0], compiled=tuple(compiled), parts=tuple(parts), order=order)


def _filling(sequence: SequenceFile, rig: Rig, hours: float) -> SequenceFile:
    """The sequence with repeats enough for so many hours; what its file says of repeats does not count."""
    one = compile_sequence(replace(sequence, fringe=replace(sequence.fringe, repeats=1)), rig).table
    repeats = int(hours * 3600.0 / float(one.duration_s.sum())) + 2
    if repeats * len(one) > MOST_SHOTS:
        raise InputError(f'"{sequence.title}": {hours:g} h hold over {MOST_SHOTS:,} shots: give it a smaller share')
    return replace(sequence, fringe=replace(sequence.fringe, repeats=repeats))


def book_sequence(
    book: Logbook,
    *files: str | Path,
    now_us: int,
    who: str,
    seed: int,
    shares: Sequence[float] = (),
    name: str | None = None,
    hours: float | None = None,
    link: str | None = None,
    unattended: bool = False,
    effort: "Effort" = "full",
    progress: Callable[[str, float], None] | None = None,
) -> Booked:
    """Read, compile, order, check and store a night of one or several sequences.

    Args:
        shares: as plan_night takes them.
        hours: length of the night's window; without it, the order's own length and a tenth more.
        link: address of the rig link in place of the rig file's.
        effort, progress: as make_order takes them.

    Raises:
        ProblemsFound: the sequence or rig file has problems, or the order is beyond the rig's limits.
        PlanImpossible: the order is longer than the window.
        InputError: unattended, and the rig file records no approval; and as plan_night.
    """
    sequence = read_sequence(files[0])
    rig = read_rig(rig_path(str(files[0]), sequence.rig))
    if unattended and rig.approval is None:
        raise InputError(
            f'{rig.file}: an unattended night needs the reference of its approval: write approval = "..." there once '
            "the person responsible for the room has given it"
        )
    planned = plan_night(files, seed=seed, shares=shares, hours=hours, effort=effort, progress=progress)
    order_s = length_of(planned.order)
    window_s = order_s * ROOM + SHORT_ROOM_S if hours is None else hours * 3600.0
    if order_s > window_s:
        raise PlanImpossible(_too_long(planned, order_s, window_s))
    given = shares or [float(time / order_s) for time in _rig_s(planned.order, len(planned.parts))]
    new = NewNight(
        name=name or free_name(book, "+".join(Path(file).stem for file in files), now_us),
        rig=rig.name,
        rig_text=rig.text,
        link=link or rig.link,
        length_s=window_s,
        requests=[
            NewRequest(
                title=part.sequence.title,
                sequence_text=part.sequence.text,
                table=part.table,
                timelines=_documents(compiled),
                goal=part.sequence.goal.kind,
                seed=seed,
                share=share,
                details=details_of(part.sequence),
            )
            for part, compiled, share in zip(planned.parts, planned.compiled, given, strict=True)
        ],
        order=planned.order,
        unattended=rig.approval if unattended else None,
    )
    night = book.book_night(new, now_us=now_us, who=who)
    return Booked(night=night, order_s=order_s, notes=planned.notes, approval=rig.approval)


def _too_long(planned: Planned, order_s: float, window_s: float) -> str:
    said = f"the order takes {order_s / 3600:.2f} h, the night has {window_s / 3600:.2f} h: "
    if len(planned.parts) > 1:
        return said + "give it more hours, or shares (--share) that the requests are cut to"
    repeats = planned.parts[0].sequence.fringe.repeats
    fit = int(repeats * window_s / order_s)
    if fit >= 1:
        return said + f"fringe.repeats = {fit} instead of {repeats} would fit, or {order_s / 3600:.1f} h"
    hours = order_s / repeats / 3600
    return said + f"even one repeat takes {hours:.2f} h; give it that, or fewer values in the sweeps"


def _documents(compiled: Compiled) -> Iterator[Mapping[str, Any]]:
    return (compiled.timelines.document(i) for i in range(len(compiled.timelines)))


def _rig_s(order: RunningOrder, requests: int) -> FloatArray:
    return np.asarray(np.bincount(order.request, weights=order.settle_s + order.duration_s, minlength=requests), float)


def length_of(order: RunningOrder) -> float:
    """From the start of the night to the end of the last shot, s."""
    return float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])


def details_of(sequence: SequenceFile) -> dict[str, Any]:
    """What sending a shot needs besides the shot table: units, states, waits."""
    return {
        "settings": {
            name: {"unit": setting.unit, "settle_s": setting.settle_s} for name, setting in sequence.settings.items()
        },
        "switches": {
            name: {"states": list(switch.states), "settle_s": switch.settle_s, "dwell_s": switch.dwell_s}
            for name, switch in sequence.switches.items()
        },
        "roles": dict(sequence.roles),
    }


def free_name(book: Logbook, stem: str, now_us: int) -> str:
    """A name that no night has: the file's, the date, and a number from the second on."""
    day = datetime.fromtimestamp(now_us / 1e6, UTC).date().isoformat()
    taken = {night.name for night in book.nights()}
    name, number = f"{stem}-{day}", 2
    while name in taken:
        name, number = f"{stem}-{day}-{number}", number + 1
    return name


CAUTIONS = (
    "Nightfringe replaces no interlock: laser, current, high-voltage and motion limits belong in hardware.",
    "Local rules and the person responsible for the room decide whether this night may run.",
    "Keep clear of moving masses while shots run; they move without warning.",
)


def cautions(*, unattended: str | None) -> list[str]:
    """Short cautions to show where a night is booked."""
    approved = f"Unattended, under approval: {unattended}." if unattended else "Somebody stays with the rig all night."
    return [*CAUTIONS, approved]
